"""A profile laid over a market's normal hours: cumulative volume and variance, and the auctions.

A row's volume is spread evenly over its open part, its variance over the whole of it, so that what
lies in the lunch break counts as closed variance. The rows have to fit the normal hours exactly:
continuous rows inside them, and no open minute without a row (an auction's will do). Anything
else is refused rather than stretched, since nobody knows where the missing volume belongs.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import lru_cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import InputError, Problem
from scheduler.sessions.builtin import built_in
from scheduler.sessions.calendar import DAY, Hours
from scheduler.sessions.profile import Profile, Row, clock_text

Span = tuple[int, int]


@dataclass(frozen=True, eq=False)
class Curve:
    """A normal full session, in seconds after local midnight of its date.

    knots : (K,) where the rates change; volume, variance : (K,) cumulative shares of continuous
    and closed time. stretches : unbroken continuous trading, between auctions and lunch.
    auctions : rows in time order.
    """

    hours: Hours
    knots: NDArray[np.int64]
    volume: NDArray[np.float64]
    variance: NDArray[np.float64]
    stretches: tuple[Span, ...]
    auctions: tuple[Row, ...]


@lru_cache(maxsize=256)
def curve_of(profile: Profile | str, hours: Hours) -> Curve:
    """The curve of a profile, or of a built-in one by its name.

    Raises:
        InputError: the profile does not fit the normal hours; names every row that does not.
    """
    if isinstance(profile, str):
        profile = built_in(profile, hours)
    rows = [_placed(row, hours) for row in profile.rows]
    if hours.open < 0:
        rows.sort(key=lambda row: row.start)  # the table has them by the clock
    found = [*_misplaced(profile, rows, hours), *_uncovered(profile, rows, hours)]
    if found:
        raise InputError(found)
    auctions = tuple(row for row in rows if row.auction)
    knots, volume, variance = _cumulative(rows, hours)
    return Curve(hours, knots, volume, variance, _stretches(rows, hours), auctions)


def _placed(row: Row, hours: Hours) -> Row:
    """Where a session opens on the evening before, late clock times belong to that evening."""
    if hours.open < 0 and row.start >= hours.open + DAY:
        return replace(row, start=row.start - DAY, end=row.end - DAY)
    return row


def _parts(row: Row, hours: Hours) -> Iterator[tuple[int, int, bool]]:
    """(start, end, open) of a continuous row cut by the lunch break."""
    lunch = hours.lunch or (row.end, row.end)
    edges = sorted({row.start, row.end, *(t for t in lunch if row.start < t < row.end)})
    for a, b in pairwise(edges):
        yield a, b, not (lunch[0] <= a < lunch[1])


def _misplaced(profile: Profile, rows: list[Row], hours: Hours) -> Iterator[Problem]:
    for row, after in pairwise(rows):
        if after.start < row.end:
            rule = f"overlaps the row {row.label}, or is out of order"
            yield profile.problem("start", after.label, rule, "sort the rows; let none overlap")
    for row in rows:
        if row.auction:
            continue
        if row.start < hours.open or row.end > hours.close:
            rule = f"continuous period outside the normal session {_text(hours)}"
            remedy = "cut it there, or use a profile of this market's own"
            yield profile.problem("start", row.label, rule, remedy)
        elif row.volume > 0.0 and not any(opened for _, _, opened in _parts(row, hours)):
            rule = f"volume in the lunch break of the session {_text(hours)}"
            yield profile.problem("volume_share", row.label, rule, "give it a volume share of 0")


def _uncovered(profile: Profile, rows: list[Row], hours: Hours) -> Iterator[Problem]:
    """Open time that no row speaks of."""
    lunch = hours.lunch or (hours.close, hours.close)
    reached = hours.open
    for start, end in [*((row.start, row.end) for row in rows), (hours.close, hours.close)]:
        if start > reached and (reached < lunch[0] or start > lunch[1]):
            gap = f"{clock_text(reached)}-{clock_text(start)}"
            rule = f"no row for this part of the normal session {_text(hours)}"
            remedy = "add a row, with shares of 0 if nothing trades then"
            yield profile.problem("start", gap, rule, remedy)
        reached = max(reached, end)


def _cumulative(
    rows: list[Row], hours: Hours
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]:
    pieces = []
    for row in rows:
        if not row.auction:
            parts = list(_parts(row, hours))
            traded = sum(b - a for a, b, opened in parts if opened)
            pieces += [
                (
                    a,
                    b,
                    row.volume * (b - a) / traded if opened and traded else 0.0,
                    row.variance * (b - a) / (row.end - row.start),
                )
                for a, b, opened in parts
            ]
    table = np.array(pieces)
    # Where rows are apart, the curve is level from one row's end to the next one's start.
    knots = table[:, :2].astype(np.int64).ravel()
    grown = np.repeat(np.cumsum(table[:, 2:], axis=0), 2, axis=0)
    grown[::2] -= table[:, 2:]
    keep = np.append(True, np.diff(knots) > 0)
    return knots[keep], grown[keep, 0], grown[keep, 1]


def _stretches(rows: list[Row], hours: Hours) -> tuple[Span, ...]:
    auctions = {row.start for row in rows if row.auction}
    found: list[Span] = []
    for row in rows:
        for a, b, opened in () if row.auction else _parts(row, hours):
            if not opened:
                continue
            if found and found[-1][1] == a and a not in auctions:
                found[-1] = (found[-1][0], b)
            else:
                found.append((a, b))
    return tuple(found)


def _text(hours: Hours) -> str:
    spans = (
        [(hours.open, hours.close)]
        if hours.lunch is None
        else [(hours.open, hours.lunch[0]), (hours.lunch[1], hours.close)]
    )
    return " and ".join(f"{clock_text(a)}-{clock_text(b)}" for a, b in spans)
