"""Sessions of the past: what one symbol did in each of them, from its bars."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from scheduler.history.placed import Bars
from scheduler.sessions.calendar import Calendar


@dataclass(frozen=True, eq=False)
class Days:
    """One symbol's sessions in time order, those without bars missing.

    session : (D,) index in the calendar. count : (D,) bars of the session. open, high, low,
    close : (D,) first, highest, lowest and last price. volume : (D,) shares, all its bars.
    """

    session: NDArray[np.int64]
    count: NDArray[np.int64]
    open: NDArray[np.float64]
    high: NDArray[np.float64]
    low: NDArray[np.float64]
    close: NDArray[np.float64]
    volume: NDArray[np.float64]

    @property
    def returns(self) -> NDArray[np.float64]:
        """Log returns (D,) from the close before; the first is NaN."""
        return np.diff(np.log(self.close), prepend=np.nan)

    @property
    def gaps(self) -> NDArray[np.float64]:
        """Log returns (D,) from the close before to the open; the first is NaN."""
        result = np.full(len(self.close), np.nan)
        result[1:] = np.log(self.open[1:] / self.close[:-1])
        return result

    @property
    def follows(self) -> NDArray[np.bool_]:
        """Where the session before is there too."""
        result: NDArray[np.bool_] = np.diff(self.session, prepend=self.session[:1]) == 1
        return result


def days_of(bars: Bars) -> Days:
    """The sessions of at least one bar."""
    session, first, count = np.unique(bars.session, return_index=True, return_counts=True)
    last = first + count - 1
    return Days(
        session=session,
        count=count,
        open=bars.open[first],
        high=np.maximum.reduceat(bars.high, first),
        low=np.minimum.reduceat(bars.low, first),
        close=bars.close[last],
        volume=np.add.reduceat(bars.volume, first),
    )


def full_sessions(days: Days, known: Calendar) -> NDArray[np.bool_]:
    """Where a session had its normal hours: neither a half day nor a late open, (D,)."""
    return np.array([_is_full(known, session) for session in days.session.tolist()], np.bool_)


@cache
def _is_full(known: Calendar, session: int) -> bool:
    hours = known.hours(session)
    edges = known.utc(session, hours.open), known.utc(session, hours.close)
    return edges == (known.opens[session], known.closes[session])
