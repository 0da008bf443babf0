"""Times in one process, and tables that can be pasted into the README."""

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


def paired(
    ours: Callable[[], Result], theirs: Callable[[], object], *, rounds: int = 5, each: int = 40
) -> tuple[float, float, Result]:
    """Best wall times of both, taken in turns so that a machine's moods meet both alike."""
    result, best, rival = ours(), np.inf, np.inf
    for _ in range(rounds):
        for _ in range(each):
            clock = time.perf_counter()
            result = ours()
            best = min(best, time.perf_counter() - clock)
        clock = time.perf_counter()
        theirs()
        rival = min(rival, time.perf_counter() - clock)
    return float(best), float(rival), result


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
