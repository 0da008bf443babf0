"""Times in one process: medians over repeats, and a table that can be pasted into the README."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from typing import TypeVar

import numpy as np

Result = TypeVar("Result")


def timed(call: Callable[[], Result], *, repeats: int = 5) -> tuple[float, Result]:
    """Median wall time in seconds after one warm-up, and the last result."""
    result = call()
    seconds = []
    for _ in range(repeats):
        clock = time.perf_counter()
        result = call()
        seconds.append(time.perf_counter() - clock)
    return float(np.median(seconds)), result


def clarabel_seconds(call: Callable[[], object]) -> float:
    """The solver's own time within a call that goes through CVXPY."""
    import cvxpy  # noqa: PLC0415

    seconds = []
    plain = cvxpy.Problem.solve

    def watched(program: cvxpy.Problem, *args: object, **options: object) -> object:
        value = plain(program, *args, **options)
        seconds.append(program.solver_stats.solve_time)
        return value

    cvxpy.Problem.solve = watched
    try:
        call()
    finally:
        cvxpy.Problem.solve = plain
    return float(sum(seconds))


def table(title: str, header: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A Markdown table under a line of text."""
    lines = ["| " + " | ".join(row) + " |" for row in (header, ["---"] * len(header), *rows)]
    return "\n".join((title, "", *lines, ""))


def milliseconds(seconds: float) -> str:
    return f"{1e3 * seconds:.3g} ms" if seconds < 1.0 else f"{seconds:.3g} s"
