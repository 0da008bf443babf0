"""A plan followed through its day: its rest planned again and again as a file of fills grows."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pandas as pd

from scheduler.errors import HeadraceError, InputError, MisuseError, Problem
from scheduler.plan import Plan
from scheduler.replan import Replan, replan

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


def complete_rows(path: str | Path) -> pd.DataFrame | None:
    """The rows of a growing CSV file whose lines have their end, as text; None without any.

    Raises:
        InputError: a file that cannot be read, or rows of another length than the header.
    """
    source = str(path)
    try:
        data = Path(path).read_bytes()
        text = data[: data.rfind(b"\n") + 1].decode("utf-8-sig")
    except FileNotFoundError:
        return None
    except (OSError, UnicodeDecodeError):
        raise InputError(
            [Problem(source, None, None, None, "cannot be read", "check it")]
        ) from None
    lines = list(csv.reader(io.StringIO(text, newline="")))
    if len(lines) < 2:
        return None
    header, rows = lines[0], [line for line in lines[1:] if line]
    problems = [
        Problem(
            source,
            number,
            None,
            ",".join(line)[:80],
            f"has {len(line)} cells where the header has {len(header)}",
            "write each row whole, with commas only between cells",
        )
        for number, line in enumerate(lines[1:], start=2)
        if line and len(line) != len(header)
    ]
    if problems:
        raise InputError(problems)
    return pd.DataFrame(rows, columns=[name.strip() for name in header], dtype="str")
