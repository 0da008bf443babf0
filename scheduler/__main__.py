"""`python -m scheduler`: the same program as `headrace`."""

from __future__ import annotations

from scheduler.cli import main

if __name__ == "__main__":
    main(prog_name="python -m scheduler")
