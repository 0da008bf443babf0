"""A plan followed through its day: its rest planned again and again as a file of fills grows."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pandas as pd

from scheduler.errors import HeadraceError, MisuseError
from scheduler.plan import Plan
from scheduler.replan import Replan, replan
from scheduler.tables.source import Stored, bytes_of

Clock = Callable[[], pd.Timestamp]
Wait = Callable[[float], bool]


def seconds_of(text: str) -> float:
    """The seconds that a text such as 30s, 5min or 1h names.

    Raises:
        MisuseError: no such text, or less than a second.
    """
    for unit, size in (("min", 60.0), ("s", 1.0), ("h", 3600.0)):
        digits = text.strip().removesuffix(unit)
        if digits != text.strip() and digits.replace(".", "", 1).isdecimal():
            if float(digits) * size < 1.0:
                break
            return float(digits) * size
    raise MisuseError(f"{text!r} is no time to wait; write it as 30s, 5min or 1h, at least 1s")


def follow(
    plan: Plan, fills: str | Path, *, every: float, clock: Clock, wait: Wait, **options: Any
) -> Iterator[Replan | HeadraceError]:
    """Plan the rest of a plan again, until nothing of it is left or `wait` says to stop.

    A round that fails gives its error, and the next one is tried: a fill that cannot be may be put
    right, a limit that cannot hold may be so only for a while.

    Parameters
    ----------
    fills : a CSV file that grows; a last line without its end is left for the next round, and a
        file that is not there yet holds no fills.
    every : seconds between rounds. clock : the present, UTC. wait : waits so many seconds and
        returns whether to stop. options : of `replan`.
    """
    first = min(pd.Timestamp(grid.time_zero, tz="UTC") for grid in plan.book.grids)
    last = max(pd.Timestamp(grid.end[-1], tz="UTC") for grid in plan.book.grids)
    while True:
        now = clock()
        at = max(now, first)
        try:
            result = replan(plan, complete_rows(fills), at=at.isoformat(), **options)
        except HeadraceError as error:
            yield error
        else:
            yield result
            if result.plan is None:
                return
        if now > last or wait(every):
            return


def complete_rows(path: str | Path) -> Stored | None:
    """What a growing CSV file holds up to its last line that has its end; None without any row.

    Raises:
        InputError: a file that cannot be read.
    """
    if not Path(path).exists():
        return None
    whole, end, _ = bytes_of(path).rpartition(b"\n")
    rows = whole.partition(b"\n")[2]
    return Stored(str(path), whole + end) if rows.strip() else None
