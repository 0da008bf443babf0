"""How much trading is expected between two instants."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.sessions.calendar import load_calendar, nanoseconds, timestamp
from scheduler.sessions.day import day_of
from scheduler.sessions.profile import Profile


def volume_between(
    calendar: str, profile: Profile | str, start: pd.Timestamp, end: pd.Timestamp
) -> tuple[float, int]:
    """Expected volume, in sessions, and closed periods between sessions that end, in [start, end).

    An auction counts at its end; an opening one at `end` itself is still to come, the
    closed period before it is over. Nothing if `end` is not after `start`.

    Raises:
        InputError: an instant without time zone or beyond the calendar; a profile that misfits.
    """
    first = np.array([nanoseconds(start)], dtype=np.int64)
    volume, nights = volume_since(calendar, profile, first, end)
    return float(volume[0]), int(nights[0])


def volume_since(
    calendar: str, profile: Profile | str, starts: NDArray[np.int64], end: pd.Timestamp
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """`volume_between` each of many instants (n,), ns UTC, and one end; (n,) both."""
    known = load_calendar(calendar)
    last = nanoseconds(end)
    volume, nights = np.zeros(len(starts)), np.zeros(len(starts), dtype=np.int64)
    before = starts < last
    if not before.any():
        return volume, nights
    first = starts[before]
    earliest = int(first.min())
    if earliest < known.opens[0] or last > known.closes[-1]:
        raise known.beyond(f"{timestamp(earliest)} to {timestamp(last)}")
    opened = np.searchsorted(known.opens, first, side="right")
    begun, over = int(opened.min()), int(np.searchsorted(known.opens, last, side="right"))
    pauses = [known.closed_before(session) for session in range(begun, over)]
    ended = np.concatenate(([0], np.cumsum(pauses, dtype=np.int64)))
    nights[before] = ended[-1] - ended[opened - begun]
    # One session more at either end: auctions may trade outside the continuous hours.
    near = range(max(begun - 1, 0), min(over + 1, len(known.dates)))
    volume[before] = sum(
        (day_of(calendar, profile, session).volume_until(first, last) for session in near),
        start=np.zeros(len(first)),
    )
    return volume, nights
