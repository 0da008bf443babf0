"""Which dates are sessions, and the local hours they have.

Hours and half days are the exchanges' published ones: NYSE 09:30-16:00, 13:00 on the day after
Thanksgiving; LSE 08:00-16:30, 12:30 on Christmas Eve; TSE 09:00-11:30 and 12:30-15:30 (from
5 November 2024, 15:00 before); HKEX 09:30-12:00 and 13:00-16:00, 12:00 on Christmas Eve.
"""

from __future__ import annotations

import warnings
from datetime import date

import numpy as np
import pandas as pd
import pytest

from scheduler.errors import InputError
from scheduler.sessions import load_calendar, session_hours, session_on_or_after
from scheduler.sessions.calendar import DAY, Hours
from scheduler.sessions.day import day_of


def local(calendar: str, day: date) -> list[str]:
    zone = load_calendar(calendar).timezone
    return [t.tz_convert(zone).strftime("%H:%M") for t in session_hours(calendar, day)]


@pytest.mark.parametrize(
    ("calendar", "day", "hours"),
    [
        ("XNYS", date(2026, 11, 25), ["09:30", "16:00"]),
        ("XNYS", date(2026, 11, 27), ["09:30", "13:00"]),
        ("XNYS", date(2026, 12, 24), ["09:30", "13:00"]),
        ("XLON", date(2026, 7, 1), ["08:00", "16:30"]),
        ("XLON", date(2026, 12, 24), ["08:00", "12:30"]),
        ("XTKS", date(2026, 12, 1), ["09:00", "15:30"]),
        ("XTKS", date(2024, 11, 1), ["09:00", "15:00"]),
        ("XHKG", date(2026, 12, 24), ["09:30", "12:00"]),
    ],
)
def test_published_hours(calendar: str, day: date, hours: list[str]) -> None:
    assert local(calendar, day) == hours


def test_normal_hours_follow_their_changes() -> None:
    """Tokyo's close moved from 15:00 to 15:30 on 5 November 2024."""
    tokyo = load_calendar("XTKS")
    lunch = (11 * 3600 + 1800, 12 * 3600 + 1800)
    before, after = (tokyo.session_of(date(2024, 11, day)) for day in (1, 5))
    assert tokyo.hours(before) == Hours(9 * 3600, 15 * 3600, lunch)
    assert tokyo.hours(after) == Hours(9 * 3600, 15 * 3600 + 1800, lunch)


@pytest.mark.parametrize("calendar", ["XNYS", "XTKS", "XHKG", "XLON", "CMES", "XKRX"])
def test_each_day_trades_exactly_when_the_calendar_says(calendar: str) -> None:
    """Normal hours, cut and moved, give back the library's own schedule, lunch included."""
    import exchange_calendars

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs = exchange_calendars.get_calendar(calendar, start="2000-01-01", end="2039-12-31")
        breaks = np.column_stack((theirs.break_starts_nanos, theirs.break_ends_nanos))
    ours = load_calendar(calendar)
    first = ours.session_of(date(2020, 6, 1))
    for session in range(first, first + 1700):
        opens, closes = int(ours.opens[session]), int(ours.closes[session])
        lunch = breaks[session][breaks[session] > 0].tolist()
        edges = [t for span in day_of(calendar, "flat", session).stretches for t in span]
        assert edges == [opens, *lunch, closes], ours.dates[session]


def test_clocks_change_between_two_mondays() -> None:
    """New York opens at 14:30 UTC in winter and 13:30 in summer; the US changes before the UK."""
    for calendar, hours in (("XNYS", [14.5, 13.5, 13.5]), ("XLON", [8.0, 8.0, 7.0])):
        days = [date(2026, 3, 6), date(2026, 3, 9), date(2026, 3, 30)]
        opens = [session_hours(calendar, day)[0] for day in days]
        assert [t.hour + t.minute / 60 for t in opens] == hours


def test_round_the_clock() -> None:
    """One session a UTC day, weekends too, each beginning where the last one ends."""
    known = load_calendar("24/7")
    assert np.all(np.diff(known.dates.astype(np.int64)) == 1)
    assert np.array_equal(known.closes[:-1], known.opens[1:])
    assert session_hours("24/7", date(2026, 11, 28))[0] == pd.Timestamp("2026-11-28", tz="UTC")
    assert not known.closed_before(10)


def test_sessions_that_open_the_evening_before() -> None:
    """A US futures session opens at 17:00 Chicago time on the evening before its date."""
    futures = load_calendar("CMES")
    assert futures.hours(-1) == Hours(17 * 3600 - DAY, 17 * 3600)
    assert local("CMES", date(2026, 12, 2)) == ["17:00", "17:00"]
    monday, tuesday = (futures.session_of(date(2026, 12, day)) for day in (7, 8))
    assert futures.closed_before(monday)
    assert not futures.closed_before(tuesday)


def test_far_dates_are_known() -> None:
    assert local("XNYS", date(2035, 11, 23)) == ["09:30", "13:00"]


@pytest.mark.parametrize(
    ("instant", "day"),
    [
        ("2026-11-27T14:00Z", date(2026, 11, 27)),
        ("2026-11-27T17:59Z", date(2026, 11, 27)),
        ("2026-11-27T18:00Z", date(2026, 11, 30)),
        ("2026-11-26T15:00Z", date(2026, 11, 27)),
        ("2026-11-28T15:00Z", date(2026, 11, 30)),
    ],
)
def test_current_or_next_session(instant: str, day: date) -> None:
    """Until the early close of 27 November it is that day; holiday and weekend are passed over."""
    assert session_on_or_after("XNYS", pd.Timestamp(instant)) == day


@pytest.mark.parametrize(
    ("code", "advice"), [("XNYC", "XNYS"), ("xlon", "XLON"), ("nowhere at all", "such as XNYS")]
)
def test_unknown_calendar(code: str, advice: str) -> None:
    with pytest.raises(InputError, match=advice) as refused:
        load_calendar(code)
    assert refused.value.problems[0].column == "calendar"


def test_a_calendar_the_library_cannot_build(monkeypatch: pytest.MonkeyPatch) -> None:
    """A calendar that breaks inside the library is refused by name, without its traceback."""
    import exchange_calendars

    def broken(*_args: object, **_options: object) -> None:
        raise NotImplementedError

    monkeypatch.setattr(exchange_calendars, "get_calendar", broken)
    with pytest.raises(InputError, match="cannot be built"):
        load_calendar("XICE")


def test_dates_that_are_no_session() -> None:
    """A holiday names the next session; a date beyond the calendar names its range."""
    with pytest.raises(InputError, match="the next one is 2026-11-27"):
        session_hours("XNYS", date(2026, 11, 26))
    for day in (date(1950, 1, 3), date(2090, 1, 3)):
        with pytest.raises(InputError, match="they run from 2000-01-03 to"):
            session_hours("XNYS", day)
    with pytest.raises(InputError, match="outside the known sessions"):
        session_on_or_after("XNYS", pd.Timestamp("2090-01-03", tz="UTC"))
