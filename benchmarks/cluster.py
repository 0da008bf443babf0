"""A large grid of what-if by processes of this machine, beside the same grid in one process."""

from __future__ import annotations

import resource
import tempfile
import time

import pandas as pd

from benchmarks.scenarios import desk
from benchmarks.timing import milliseconds, table
from scheduler.settings import Settings
from scheduler.what_if import WhatIf, what_if

_ORDERS = 50
_GRID = {"urgency": "0.01:10:100", "volume": "0.5:2:20"}


def run() -> None:
    rows = []
    alone, known = _solved(None)
    rows.append(_row("none: in one process", 1, alone, alone, known))
    for workers in (1, 2):
        seconds, found = _solved(workers)
        pd.testing.assert_frame_equal(found.scenarios, known.scenarios, rtol=1e-10, atol=1e-8)
        rows.append(_row(str(workers), workers, seconds, alone, found))
    header = ("workers", "rows", "time, all told", "rows a second and worker", "ratio", "peak")
    print(
        table(
            f"What-if through a local Dask cluster, {_ORDERS} orders x 26, kept in parts on disk; "
            "start of the processes included, the same numbers within 1e-10; peak memory of "
            "the process that keeps the parts and the table, the largest so far:",
            header,
            rows,
        )
    )


def _solved(workers: int | None) -> tuple[float, WhatIf]:
    settings = Settings().with_values("plan", bucket=15.0)
    with tempfile.TemporaryDirectory() as out:
        clock = time.perf_counter()
        found = what_if(
            *desk(_ORDERS),
            grid=_GRID,
            settings=settings,
            date="2026-03-05",
            at="09:30",
            out=out,
            workers=workers,
        )
        return time.perf_counter() - clock, found


def _row(name: str, each: int, seconds: float, alone: float, found: WhatIf) -> tuple[str, ...]:
    rows = len(found.table)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024
    return (
        name,
        f"{rows:,}",
        milliseconds(seconds),
        f"{rows / seconds / each:,.0f}",
        f"{alone / seconds:.2f}",
        f"{peak} MB",
    )
