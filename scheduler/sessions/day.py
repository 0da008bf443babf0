"""One actual session: the normal curve cut to the hours that this date really has.

Half days and late opens: the closed hours are cut out of the curve, the closing auction moves to
the early close (the opening auction to the late open), and nothing is rescaled, so that the
shares add up to less than 1. A session that closes late is moved as a whole and takes its curve
along (Seoul, on the day of the university entrance exam).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from scheduler.sessions.calendar import SECOND, Calendar, load_calendar
from scheduler.sessions.curve import Curve, Span, curve_of
from scheduler.sessions.profile import Profile, Row


@dataclass(frozen=True, eq=False)
class Day:
    """One session in nanoseconds UTC.

    knots, volume, variance : as in `Curve`. stretches, lunches : spans of continuous trading and
    of closed time between them. auctions : (start, end, volume share).
    """

    knots: NDArray[np.int64]
    volume: NDArray[np.float64]
    variance: NDArray[np.float64]
    stretches: tuple[Span, ...]
    lunches: tuple[Span, ...]
    auctions: tuple[tuple[int, int, float], ...]

    def shares(
        self, instants: NDArray[np.int64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Volume and variance of the stretches up to each instant, from any one zero."""
        first, last = self._span
        # Seconds from the first knot: nanoseconds since the epoch do not fit a float.
        at = (np.clip(instants, first, last) - self.knots[0]) / SECOND
        knots = (self.knots - self.knots[0]) / SECOND
        return np.interp(at, knots, self.volume), np.interp(at, knots, self.variance)

    def volume_until(self, starts: NDArray[np.int64], end: int) -> NDArray[np.float64]:
        """Expected volume share in [start, end) of each start; an auction counts at its end."""
        traded = self.shares(np.array([end]))[0] - self.shares(starts)[0]
        for _, uncross, volume in self.auctions:
            if uncross < end:
                traded = traded + np.where(starts <= uncross, volume, 0.0)
        return traded

    @property
    def uncrossings(self) -> Span:
        """First and last instant at which something trades."""
        first, last = self._span
        ends = [end for _, end, _ in self.auctions]
        return min([first, *ends]), max([last, *ends])

    @property
    def _span(self) -> Span:
        if not self.stretches:
            return int(self.knots[0]), int(self.knots[0])
        return self.stretches[0][0], self.stretches[-1][1]


@lru_cache(maxsize=4096)
def day_of(calendar: str, profile: Profile | str, session: int) -> Day:
    """The actual session of a calendar by its index.

    Raises:
        InputError: the profile does not fit the market's normal hours.
    """
    known = load_calendar(calendar)
    curve = curve_of(profile, known.hours(session))
    shift, late, early = _moved(known, curve, session)

    def utc(seconds: int) -> int:
        return known.utc(session, seconds + shift)

    begins, ends = curve.stretches[0][0] + late, curve.stretches[-1][1] - early
    cut = [(max(a, begins), min(b, ends)) for a, b in curve.stretches]
    stretches = [(a, b) for a, b in cut if a < b]
    lunch = curve.hours.lunch
    lunches = [lunch] if lunch and begins < lunch[0] and lunch[1] < ends else []
    return Day(
        knots=np.array([utc(knot) for knot in curve.knots.tolist()]),
        volume=curve.volume,
        variance=curve.variance,
        stretches=tuple((utc(a), utc(b)) for a, b in stretches),
        lunches=tuple((utc(a), utc(b)) for a, b in lunches),
        auctions=tuple(
            (utc(start), utc(end), volume) for start, end, volume in _auctions(curve, late, early)
        ),
    )


def _moved(known: Calendar, curve: Curve, session: int) -> tuple[int, int, int]:
    """Seconds by which a session is moved as a whole, opens late and closes early."""
    hours = curve.hours
    opens = known.clock(session, int(known.opens[session]))
    closes = known.clock(session, int(known.closes[session]))
    shift = max(closes - hours.close, 0)
    return shift, max(opens - hours.open - shift, 0), max(hours.close + shift - closes, 0)


def _auctions(curve: Curve, late: int, early: int) -> list[tuple[int, int, float]]:
    """Opening and closing auctions move with the open and the close, others stay or are cut out."""
    opens, closes = curve.stretches[0][0], curve.stretches[-1][1]

    def moved(row: Row) -> tuple[int, int, float] | None:
        if row.end <= opens:
            return row.start + late, row.end + late, row.volume
        if row.start >= closes:
            return row.start - early, row.end - early, row.volume
        if opens + late <= row.start and row.end <= closes - early:
            return row.start, row.end, row.volume
        return None

    return [kept for row in curve.auctions if (kept := moved(row)) is not None]
