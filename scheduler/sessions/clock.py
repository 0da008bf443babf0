"""Times as people write them: resolved to instants on the way in, local with offset on the way out.

Canonical texts: a time of day (belongs to the session's date), a local date-time, or a date-time
with its offset.
"""

from __future__ import annotations

from collections.abc import Iterable
from datetime import UTC, date, datetime, time, timedelta
from zoneinfo import ZoneInfo

import pandas as pd

from scheduler.errors import InputError
from scheduler.sessions.calendar import DAY, Calendar, load_calendar, session_hours
from scheduler.sessions.refusals import refusal


def resolve(text: str, *, date: date, calendar: str) -> pd.Timestamp:
    """The instant, UTC, that a text names on a market's local clock.

    A time of day belongs to the session of `date`; where sessions open on the evening before, a
    time from then on is that evening's. 24:00 is the end of the day.

    Raises:
        InputError: no ISO 8601 time, a date alone, or a local time that the change of the clocks
            skips or repeats.
    """
    known = load_calendar(calendar)
    cell = text.strip()
    clock = _time_of_day(cell)
    if clock is not None:
        return _instant(datetime.combine(_day_of(clock, date, known), time()) + clock, known, text)
    try:
        moment = datetime.fromisoformat(cell)
    except ValueError:
        raise _unreadable(text, "is no ISO 8601 time") from None
    if len(cell) <= len("2026-01-05"):
        raise _unreadable(text, "is a date without a time of day")
    return _instant(moment, known, text)


def planning_time(calendar: str, day: date, now: pd.Timestamp) -> pd.Timestamp:
    """Now, or the session's open if that is still to come."""
    opens, _ = session_hours(calendar, day)
    return max(opens, now.tz_convert("UTC").as_unit("ns"))


def local_text(instant: int, zone: ZoneInfo) -> str:
    """Local ISO 8601 time with offset of nanoseconds since the epoch; whole seconds if it can."""
    return pd.Timestamp(instant, unit="ns", tz="UTC").tz_convert(zone).isoformat()


def local_texts(instants: Iterable[int], zone: ZoneInfo) -> tuple[str, ...]:
    return tuple(local_text(instant, zone) for instant in instants)


def _time_of_day(cell: str) -> timedelta | None:
    if cell in ("24:00", "24:00:00"):
        return timedelta(days=1)
    if ":" not in cell[:3]:
        return None
    try:
        clock = time.fromisoformat(cell if cell[1:2] != ":" else f"0{cell}")
    except ValueError:
        return None
    if clock.tzinfo is not None:
        return None
    return datetime.combine(date.min, clock) - datetime.combine(date.min, time())


def _day_of(clock: timedelta, day: date, known: Calendar) -> date:
    opens = known.hours(known.session_of(day)).open
    evening = opens < 0 and clock.total_seconds() >= opens + DAY
    return day - timedelta(days=1) if evening else day


def _instant(moment: datetime, known: Calendar, text: str) -> pd.Timestamp:
    if moment.tzinfo is None:
        first, second = (moment.replace(tzinfo=known.zone, fold=fold) for fold in (0, 1))
        before, after = first.utcoffset(), second.utcoffset()
        assert before is not None
        assert after is not None
        if before != after:
            what = "comes twice" if before > after else "does not exist"
            raise refusal(
                "orders",
                None,
                text,
                f"{what} on {moment.date()} in {known.timezone}, where the clocks change",
                f"give it with its offset, as in {second.isoformat()}",
            )
        moment = first
    return pd.Timestamp(moment.astimezone(UTC)).as_unit("ns")


def _unreadable(text: str, rule: str) -> InputError:
    return refusal(
        "orders", None, text, rule, "write HH:MM, 2026-01-05T10:00 or 2026-01-05T10:00-05:00"
    )
