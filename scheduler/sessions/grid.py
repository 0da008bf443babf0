"""A window on a market as a grid of stages: what the rest of the program knows of time.

A weekend or holiday counts as one closed period like a weeknight, whatever its length: open-to-
close variance is over six times that of a whole weekend (French & Roll 1986, J. Financial
Economics 17), so a weekend has less than 1/7 of the variance of the day it belongs to, no more
than a weeknight's share. A session that follows the last one without a pause has all the
variance of its day to itself.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date
from enum import IntEnum
from functools import cached_property, lru_cache
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.sessions.calendar import load_calendar, nanoseconds
from scheduler.sessions.clock import local_text, local_texts
from scheduler.sessions.day import Day, day_of
from scheduler.sessions.profile import Profile
from scheduler.sessions.refusals import refusal
from scheduler.sessions.window import Window, find_window, holds_nothing

_MINUTE = 60_000_000_000
_SLIVER = 1_000_000
"""No bucket is shorter than a millisecond because its length was rounded to nanoseconds."""


class Kind(IntEnum):
    """What a stage is."""

    CONTINUOUS = 0
    AUCTION = 1
    CLOSED = 2


@dataclass(frozen=True, eq=False)
class Grid:
    """Stages of one order's window in time order: buckets that may trade, and closed periods.

    kind : (M,) of `Kind`. start, end : (M,) datetime64[ns], UTC; both alike for an instant
    auction. volume : (M,) share v of a full session's volume. variance : (M,) share h of one
    day's variance. session : (M,) from 0; a closed period between sessions belongs to the one
    after it. overnight : (M,) closed periods between sessions. timezone : IANA name. time_zero :
    when cost and risk begin to count, UTC.
    """

    kind: NDArray[np.int8]
    start: NDArray[np.datetime64]
    end: NDArray[np.datetime64]
    volume: NDArray[np.float64]
    variance: NDArray[np.float64]
    session: NDArray[np.int64]
    overnight: NDArray[np.bool_]
    timezone: str
    time_zero: np.datetime64

    def __len__(self) -> int:
        return len(self.kind)

    @cached_property
    def open(self) -> NDArray[np.bool_]:
        """(M,) stages that may trade."""
        trading: NDArray[np.bool_] = self.kind != Kind.CLOSED
        return trading

    @cached_property
    def auction(self) -> NDArray[np.bool_]:
        """(M,) auctions."""
        auctions: NDArray[np.bool_] = self.kind == Kind.AUCTION
        return auctions

    @cached_property
    def local_start(self) -> tuple[str, ...]:
        """Start of each stage, local ISO 8601 time with offset."""
        return local_texts(self.start.astype(np.int64).tolist(), ZoneInfo(self.timezone))

    @cached_property
    def local_end(self) -> tuple[str, ...]:
        """End of each stage, local ISO 8601 time with offset."""
        return local_texts(self.end.astype(np.int64).tolist(), ZoneInfo(self.timezone))


@dataclass(frozen=True)
class _Stage:
    kind: Kind
    start: int
    end: int
    volume: float
    variance: float
    session: int
    overnight: bool = False


def build_grid(
    calendar: str,
    profile: Profile | str,
    *,
    date: date,
    start: pd.Timestamp | None = None,
    end: pd.Timestamp | None = None,
    at: pd.Timestamp | None = None,
    bucket: float,
    overnight_share: float,
    cuts: tuple[pd.Timestamp, ...] = (),
) -> tuple[Grid, tuple[str, ...]]:
    """The stages of a window, and notes on what was clipped. Cached: the arrays are read-only.

    Parameters
    ----------
    calendar : market code, or `24/7`. profile : a profile, or the name of a built-in one.
    date : the session that a missing `start` or `end` is the open or close of; the auctions then
        belong to the window. An auction is indivisible: it is in where its end is.
    start, end, at : instants. Time zero is the last of `start`, `at` and the first open; a window
        that begins or ends in closed time is clipped, and only closed periods between two
        stages that trade are counted.
    bucket : minutes, counted from each open, after lunch anew; the last bucket may be shorter.
    overnight_share : share of a day's variance in the closed period before its session.
    cuts : instants at which buckets are split.

    Raises:
        InputError: nothing trades in the window, `date` is no session, or the profile does not
            fit the market's hours. Sources `orders`, `market`, `profiles`; no row.
    """
    step = round(bucket * _MINUTE) if np.isfinite(bucket) else 0
    if step < _SLIVER:
        raise refusal("settings", "plan.bucket", bucket, "must be positive", "give minutes")
    instants = [None if moment is None else nanoseconds(moment) for moment in (start, end, at)]
    splits = tuple(sorted({nanoseconds(cut) for cut in cuts}))
    return _build(calendar, profile, date, *instants, step, overnight_share, splits)


@lru_cache(maxsize=4096)
def _build(
    calendar: str,
    profile: Profile | str,
    date: date,
    start: int | None,
    end: int | None,
    at: int | None,
    step: int,
    overnight_share: float,
    cuts: tuple[int, ...],
) -> tuple[Grid, tuple[str, ...]]:
    known = load_calendar(calendar)
    window = find_window(known, profile, known.session_of(date), start, end, at)
    stages: list[_Stage] = []
    count = 0
    for session in window.sessions:
        closed_share = overnight_share if known.closed_before(session) else 0.0
        day = day_of(calendar, profile, session)
        found = _of_day(day, window, count, step, 1.0 - closed_share, cuts)
        if not found:
            continue
        if stages and known.closed_before(session):
            stages.append(_Stage(Kind.CLOSED, 0, 0, 0.0, closed_share, count, True))
        stages += found
        count += 1
    stages = _trimmed(stages)
    if not stages:
        raise holds_nothing(known, profile, window)
    grid = _grid(stages, known.timezone, window.start)
    opens, _ = day_of(calendar, profile, window.home).uncrossings
    begun = (
        at is not None and opens < stages[0].start <= at
    )  # not trading clips the start, but `at`
    return grid, _notes(stages, None if begun else start, end, known.zone)


def _of_day(
    day: Day, window: Window, session: int, step: int, scale: float, cuts: tuple[int, ...]
) -> list[_Stage]:
    """The stages of one session inside the window; closed ones without their final times."""
    stages = [
        _Stage(Kind.AUCTION, start, end, volume, 0.0, session)
        for start, end, volume in day.auctions
        if window.start <= end <= window.end
    ]
    for span in day.stretches:
        edges = _edges(span, window, step, cuts)
        volume, variance = (np.diff(total).tolist() for total in day.shares(edges))
        ends = edges.tolist()
        stages += [
            _Stage(Kind.CONTINUOUS, a, b, v, h * scale, session)
            for a, b, v, h in zip(ends[:-1], ends[1:], volume, variance, strict=True)
        ]
    for lunch in day.lunches:
        if not (window.start <= lunch[0] and lunch[1] <= window.end):
            continue
        _, variance = day.shares(np.array(lunch))
        share = float(variance[1] - variance[0]) * scale
        stages.append(_Stage(Kind.CLOSED, *lunch, 0.0, share, session))
    return sorted(stages, key=lambda stage: (stage.start, stage.end))


def _edges(
    span: tuple[int, int], window: Window, step: int, cuts: tuple[int, ...]
) -> NDArray[np.int64]:
    """Bucket edges of a stretch inside the window, ns; none if the two do not meet."""
    first, last = max(span[0], window.start), min(span[1], window.end)
    if first >= last:
        return np.empty(0, np.int64)
    regular = np.arange(span[0] + step, span[1] - _SLIVER, step, dtype=np.int64)
    inner = np.concatenate((regular, np.array(cuts, np.int64)))
    inner = inner[(inner > first) & (inner < last)]
    return np.unique(np.concatenate(([first], inner, [last])))


def _trimmed(stages: list[_Stage]) -> list[_Stage]:
    """Without closed periods at either end: they are no part of the order's time."""
    trading = [i for i, stage in enumerate(stages) if stage.kind != Kind.CLOSED]
    return stages[trading[0] : trading[-1] + 1] if trading else []


def _grid(stages: list[_Stage], timezone: str, window_start: int) -> Grid:
    kind = np.array([stage.kind for stage in stages], np.int8)
    start = np.array([stage.start for stage in stages], np.int64)
    end = np.array([stage.end for stage in stages], np.int64)
    # A closed period lasts from what trades before it to what trades after it.
    closed = np.flatnonzero(kind == Kind.CLOSED)
    start[closed], end[closed] = end[closed - 1], start[closed + 1]
    grid = Grid(
        kind=kind,
        start=start.astype("datetime64[ns]"),
        end=end.astype("datetime64[ns]"),
        volume=np.array([stage.volume for stage in stages]),
        variance=np.array([stage.variance for stage in stages]),
        session=np.array([stage.session for stage in stages], np.int64),
        overnight=np.array([stage.overnight for stage in stages]),
        timezone=timezone,
        time_zero=np.datetime64(max(window_start, int(start[0])), "ns"),
    )
    for array in vars(grid).values():
        if isinstance(array, np.ndarray):
            array.flags.writeable = False
    return grid


def _notes(
    stages: list[_Stage], start: int | None, end: int | None, zone: ZoneInfo
) -> tuple[str, ...]:
    notes = []
    first, last = stages[0].start, max(stage.end for stage in stages)
    if start is not None and start < first:
        opens, given = local_text(first, zone), local_text(start, zone)
        notes.append(f"start {given} is before trading: clipped to {opens}")
    if end is not None and end > last:
        closes, given = local_text(last, zone), local_text(end, zone)
        notes.append(f"end {given} is after trading: clipped to {closes}")
    return tuple(notes)
