"""From an order's start, end and planning time to the instants and sessions they span."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.errors import InputError
from scheduler.sessions.calendar import Calendar
from scheduler.sessions.clock import local_text
from scheduler.sessions.day import day_of
from scheduler.sessions.profile import Profile
from scheduler.sessions.refusals import refusal


@dataclass(frozen=True)
class Window:
    """start, end : ns, UTC, `at` counted in. home : index of the session it was asked for."""

    start: int
    end: int
    at: int | None
    home: int
    sessions: range


def find_window(
    known: Calendar,
    profile: Profile | str,
    home: int,
    start: int | None,
    end: int | None,
    at: int | None,
) -> Window:
    """The window between two instants; a missing one is the home session's first or last.

    With an end missing and a start after the home session, the end is that of the start's session.

    Raises:
        InputError: it ends before it starts or before the planning time, or the calendar ends.
    """
    first, last = day_of(known.code, profile, home).uncrossings
    # How long before the open and after the close the market's auctions trade.
    lead, tail = int(known.opens[home]) - first, last - int(known.closes[home])
    begin = first if start is None else start
    opening = int(np.searchsorted(known.closes, begin - tail))
    if opening == len(known.dates):
        raise known.beyond(local_text(begin, known.zone))
    if end is None and start is not None and start > last:
        given, closes = local_text(start, known.zone), local_text(last, known.zone)
        if given[:10] == closes[:10]:
            remedy = "give an earlier start, or an end on a later day"
            raise refusal("orders", "start", given, f"is after the close, {closes}", remedy)
    if end is None:
        ends_in = max(home, opening)
        end = day_of(known.code, profile, ends_in).uncrossings[1]
    if start is not None and end < start:
        given = local_text(end, known.zone)
        raise refusal("orders", "end", given, "is before start", "give an end after the start")
    if end > known.closes[-1] + tail:
        raise known.beyond(local_text(end, known.zone))
    if at is not None and at > end:
        raise _too_late(known, end, at)
    begin = begin if at is None else max(begin, at)
    opening = int(np.searchsorted(known.closes, begin - tail))
    closing = int(np.searchsorted(known.opens, end + lead, side="right"))
    return Window(begin, end, at, home, range(opening, closing))


def holds_nothing(known: Calendar, profile: Profile | str, window: Window) -> InputError:
    """The error for a window in which nothing trades."""
    start, end = (local_text(moment, known.zone) for moment in (window.start, window.end))
    if window.at == window.end:
        return _too_late(known, window.end, window.at)
    if window.start >= window.end:
        return refusal("orders", "end", end, "window is empty", "give an end after the start")
    hours = " and ".join(
        f"{local_text(opens, known.zone)} to {local_text(closes, known.zone)}"
        for opens, closes in day_of(known.code, profile, window.home).stretches
    )
    return refusal(
        "orders",
        "start",
        f"{start} to {end}",
        f"nothing trades in this window; {known.code} trades from {hours}",
        "give a window that meets these hours, or those of another session",
    )


def _too_late(known: Calendar, end: int, at: int) -> InputError:
    return refusal(
        "orders",
        "end",
        local_text(end, known.zone),
        f"the order's time is over at the planning time {local_text(at, known.zone)}",
        "give a later end or date, or an earlier planning time (at)",
    )
