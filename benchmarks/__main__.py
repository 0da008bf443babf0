"""`python -m benchmarks [NAME ...]`: print the tables of all benchmarks, or of those named."""

from __future__ import annotations

import os
import sys
from importlib import import_module

# one thread for ours and for the reference, set before numpy is loaded
for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "RAYON_NUM_THREADS"):
    os.environ[name] = "1"

os.environ["HEADRACE_JOURNAL"] = "off"

BENCHMARKS = (
    "bars",
    "cluster",
    "console",
    "independent",
    "journal",
    "lists",
    "paths",
    "regret",
    "scenarios",
    "startup",
    "tape",
)


def main() -> None:
    chosen = sys.argv[1:] or BENCHMARKS
    for name in chosen:
        if name not in BENCHMARKS:
            sys.exit(f"no benchmark {name!r}; there are {', '.join(BENCHMARKS)}")
        import_module(f"benchmarks.{name}").run()


main()
