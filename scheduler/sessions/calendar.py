"""Exchange calendars: which dates are sessions, when each opens and closes, and what is normal."""

from __future__ import annotations

import warnings
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from difflib import get_close_matches
from functools import cache, cached_property
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.sessions.refusals import refusal

ROUND_THE_CLOCK = "24/7"
DAY = 86_400
"""Seconds of a day."""
SECOND = 1_000_000_000
"""Nanoseconds of a second."""

_FIRST, _LAST = "2000-01-01", "2039-12-31"
_NO_BREAK = -(10**9)


@dataclass(frozen=True)
class Hours:
    """Normal hours of a full session, seconds after local midnight of the session's date.

    `open` is negative where a session opens on the evening before; `close` may be 86,400.
    """

    open: int
    close: int
    lunch: tuple[int, int] | None = None


@dataclass(frozen=True, eq=False)
class Calendar:
    """All sessions of one market in time order.

    dates : (N,) datetime64[D]; opens, closes : (N,) ns since the epoch, UTC.
    """

    code: str
    timezone: str
    dates: NDArray[np.datetime64]
    opens: NDArray[np.int64]
    closes: NDArray[np.int64]
    kinds_of_hours: tuple[Hours, ...]
    which_hours: NDArray[np.int64]

    @cached_property
    def zone(self) -> ZoneInfo:
        return ZoneInfo(self.timezone)

    def hours(self, session: int) -> Hours:
        """The normal hours at the time of a session; its own may be shorter."""
        return self.kinds_of_hours[int(self.which_hours[session])]

    def date_of(self, session: int) -> date:
        day: date = self.dates[session].item()
        return day

    def closed_before(self, session: int) -> bool:
        """Whether a closed period lies between a session and the one before it."""
        return session == 0 or bool(self.opens[session] > self.closes[session - 1])

    def session_of(self, day: date) -> int:
        """The index of the session of a date.

        Raises:
            InputError: the date is no session, or beyond what the calendar knows.
        """
        index = int(np.searchsorted(self.dates, np.datetime64(day, "D")))
        if index < len(self.dates) and self.date_of(index) == day:
            return index
        if index in (0, len(self.dates)):
            raise self.beyond(day)
        raise refusal(
            "orders",
            "date",
            day,
            f"is no session of {self.code}",
            f"the next one is {self.date_of(index)}",
        )

    def session_closing_after(self, instant: int) -> int:
        """The index of the first session that closes after an instant (ns, UTC)."""
        index = int(np.searchsorted(self.closes, instant, side="right"))
        if index == len(self.closes):
            raise self.beyond(pd.Timestamp(instant).date())
        return index

    def beyond(self, value: object) -> Exception:
        """The error for a time outside the calendar."""
        return refusal(
            "orders",
            "date",
            value,
            f"lies outside the known sessions of {self.code}",
            f"they run from {self.date_of(0)} to {self.date_of(len(self.dates) - 1)}",
        )

    def utc(self, session: int, seconds: int) -> int:
        """The instant (ns) at which the local clock stands at seconds after midnight."""
        local = datetime.combine(self.date_of(session), time()) + timedelta(seconds=seconds)
        return int(local.replace(tzinfo=self.zone).timestamp()) * SECOND

    def clock(self, session: int, instant: int) -> int:
        """What the local clock shows at an instant, in seconds after the session's midnight."""
        local = datetime.fromtimestamp(instant // SECOND, self.zone).replace(tzinfo=None)
        return int((local - datetime.combine(self.date_of(session), time())).total_seconds())


@cache
def load_calendar(code: str) -> Calendar:
    """The calendar of an ISO 10383 market code, or `24/7`: one session a UTC day, never closed.

    Raises:
        InputError: the code is unknown, or its calendar cannot be built.
    """
    if code == ROUND_THE_CLOCK:
        return _round_the_clock()
    with warnings.catch_warnings():
        # The calendar library calls deprecated parts of pandas; nothing a user can act on.
        warnings.simplefilter("ignore")
        return _from_library(code, _library_calendar(code))


def session_on_or_after(calendar: str, instant: pd.Timestamp) -> date:
    """The date of the session under way at an instant, else of the next one."""
    known = load_calendar(calendar)
    return known.date_of(known.session_closing_after(nanoseconds(instant)))


def session_hours(calendar: str, day: date) -> tuple[pd.Timestamp, pd.Timestamp]:
    """When continuous trading of a date's session opens and closes, UTC.

    Raises:
        InputError: the date is no session.
    """
    known = load_calendar(calendar)
    session = known.session_of(day)
    return timestamp(known.opens[session]), timestamp(known.closes[session])


def nanoseconds(instant: pd.Timestamp) -> int:
    """Nanoseconds since the epoch of a time that has a time zone."""
    if instant.tzinfo is None:
        raise refusal("orders", None, instant, "has no time zone", "give an instant, as in UTC")
    return int(instant.as_unit("ns").value)


def timestamp(instant: int | np.int64) -> pd.Timestamp:
    """The UTC time of nanoseconds since the epoch."""
    return pd.Timestamp(int(instant), unit="ns", tz="UTC")


def _round_the_clock() -> Calendar:
    dates = np.arange(np.datetime64(_FIRST), np.datetime64(_LAST) + 1)
    opens = dates.astype("datetime64[ns]").astype(np.int64)
    return Calendar(
        code=ROUND_THE_CLOCK,
        timezone="UTC",
        dates=dates,
        opens=opens,
        closes=opens + DAY * SECOND,
        kinds_of_hours=(Hours(0, DAY),),
        which_hours=np.zeros(len(dates), np.int64),
    )


def _library_calendar(code: str) -> Any:
    import exchange_calendars as library  # noqa: PLC0415

    names = library.get_calendar_names(include_aliases=True)
    if code not in names:
        near = get_close_matches(code.upper(), names, n=1)
        remedy = f"did you mean {near[0]!r}?" if near else "give a code such as XNYS, or 24/7"
        raise refusal("market", "calendar", code, "is no known exchange calendar", remedy)
    # Some calendars know holidays only from, or up to, a year of their own: then their own range.
    for start, end in ((_FIRST, _LAST), (None, _LAST), (None, None)):
        try:
            return library.get_calendar(code, start=start, end=end)
        except (ValueError, NotImplementedError):
            continue
    raise refusal(
        "market",
        "calendar",
        code,
        "cannot be built by the installed exchange_calendars and pandas",
        "use the calendar of a market with the same hours and holidays, or other versions",
    )


def _from_library(code: str, known: Any) -> Calendar:
    dates = known.sessions_nanos.astype("datetime64[ns]").astype("datetime64[D]")
    table = np.column_stack(
        [
            _clock_at(known.open_times, dates) + DAY * known.open_offset,
            _clock_at(known.close_times, dates) + DAY * known.close_offset,
            _clock_at(known.break_start_times or (), dates),
            _clock_at(known.break_end_times or (), dates),
        ]
    )
    rows, which = np.unique(table, axis=0, return_inverse=True)
    return Calendar(
        code=code,
        timezone=str(known.tz),
        dates=dates,
        opens=np.asarray(known.opens_nanos),
        closes=np.asarray(known.closes_nanos),
        kinds_of_hours=tuple(_hours(*row) for row in rows.tolist()),
        which_hours=which.reshape(-1),
    )


def _hours(opens: int, closes: int, lunch: int, back: int) -> Hours:
    return Hours(opens, closes, None if lunch == _NO_BREAK else (lunch, back))


def _clock_at(
    changes: Iterable[tuple[pd.Timestamp | None, time | None]], dates: NDArray[np.datetime64]
) -> NDArray[np.int64]:
    """Seconds after midnight in force on each date, given (first date, time) in date order."""
    since, seconds = [np.datetime64("0001-01-01")], [_NO_BREAK]
    for day, clock in changes:
        since.append(since[0] if day is None else np.datetime64(day.date(), "D"))
        seconds.append(_NO_BREAK if clock is None else clock.hour * 3600 + clock.minute * 60)
    at = np.searchsorted(np.array(since), dates, side="right") - 1
    found: NDArray[np.int64] = np.array(seconds, np.int64)[at]
    return found
