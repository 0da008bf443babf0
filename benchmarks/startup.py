"""Start-up: whole processes, each beside a baseline process in the same run."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from benchmarks.timing import milliseconds, table, timed

_EXAMPLES = Path(__file__).parent.parent / "examples"


def run() -> None:
    python = sys.executable
    one_order = (_EXAMPLES / "orders.csv").read_text().splitlines()[:2]
    plan = [
        *(python, "-m", "scheduler", "plan", "-", "--market", str(_EXAMPLES / "market.csv")),
        *("--profiles", str(_EXAMPLES / "profiles.csv")),
        *("--date", "2026-03-05", "--at", "09:30", "--quiet", "--out", "-"),
    ]
    cases = (
        ("headrace --help", [python, "-m", "scheduler", "--help"], "import click"),
        ("plan of one order", plan, "import pandas"),
    )
    rows = []
    for name, command, baseline in cases:
        text = "\n".join(one_order)
        ours, _ = timed(lambda c=command, t=text: _run(c, t), repeats=5)
        base, _ = timed(lambda b=baseline: _run([python, "-c", b], ""), repeats=5)
        rows.append((name, milliseconds(ours), baseline, milliseconds(base), f"{ours / base:.1f}"))
    print(table("Start-up:", ("process", "time", "baseline", "its time", "ratio"), rows))


def _run(command: list[str], text: str) -> None:
    subprocess.run(command, input=text, text=True, capture_output=True, check=True)
