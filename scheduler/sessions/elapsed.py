"""How much trading is expected between two instants."""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler.sessions.calendar import load_calendar, nanoseconds
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
    known = load_calendar(calendar)
    first, last = nanoseconds(start), nanoseconds(end)
    if first >= last:
        return 0.0, 0
    if first < known.opens[0] or last > known.closes[-1]:
        raise known.beyond(f"{start} to {end}")
    opened = [int(np.searchsorted(known.opens, moment, side="right")) for moment in (first, last)]
    gaps = sum(known.closed_before(session) for session in range(*opened))
    # One session more at either end: auctions may trade outside the continuous hours.
    near = range(max(opened[0] - 1, 0), min(opened[1] + 1, len(known.dates)))
    volume = sum(day_of(calendar, profile, i).volume_between(first, last) for i in near)
    return volume, gaps
