"""Times as text: to instants and back."""

from __future__ import annotations

from datetime import date

import pandas as pd
import pytest

from scheduler.errors import InputError
from scheduler.sessions import load_calendar, planning_time, resolve
from scheduler.sessions.clock import local_text

DAY = date(2026, 11, 27)


@pytest.mark.parametrize(
    ("text", "instant"),
    [
        ("10:00", "2026-11-27T15:00Z"),
        (" 9:45 ", "2026-11-27T14:45Z"),
        ("10:00:30", "2026-11-27T15:00:30Z"),
        ("24:00", "2026-11-28T05:00Z"),
        ("2026-11-30T10:00", "2026-11-30T15:00Z"),
        ("2026-07-01 10:00", "2026-07-01T14:00Z"),
        ("2026-11-27T10:00:00.250", "2026-11-27T15:00:00.250Z"),
        ("2026-11-27T10:00+01:00", "2026-11-27T09:00Z"),
        ("2026-11-27T10:00:00Z", "2026-11-27T10:00Z"),
    ],
)
def test_resolve(text: str, instant: str) -> None:
    """A bare time belongs to the date; a bare date-time to New York; an offset is kept."""
    found = resolve(text, date=DAY, calendar="XNYS")
    assert found == pd.Timestamp(instant)
    assert str(found.tz) == "UTC"


def test_the_evening_before_belongs_to_an_overnight_session() -> None:
    chicago = [resolve(t, date=DAY, calendar="CMES") for t in ("17:00", "23:59", "00:30", "16:59")]
    assert [t.tz_convert("America/Chicago").strftime("%d %H:%M") for t in chicago] == [
        "26 17:00",
        "26 23:59",
        "27 00:30",
        "27 16:59",
    ]


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("2026-11-01T01:30", "comes twice on 2026-11-01 in America/New_York"),
        ("2026-03-08T02:30", "does not exist on 2026-03-08 in America/New_York"),
        ("2026-11-27", "date without a time of day"),
        ("20261127", "date without a time of day"),
        ("25:00", "no ISO 8601 time"),
        ("10:00+01:00", "no ISO 8601 time"),
        ("noon", "no ISO 8601 time"),
        ("2026-13-01T10:00", "no ISO 8601 time"),
    ],
)
def test_times_that_name_no_instant(text: str, complaint: str) -> None:
    with pytest.raises(InputError, match=complaint) as refused:
        resolve(text, date=DAY, calendar="XNYS")
    assert refused.value.problems[0].value == text


def test_the_advice_on_a_doubtful_time_works() -> None:
    """The offset that the message offers resolves."""
    with pytest.raises(InputError) as refused:
        resolve("2026-11-01T01:30", date=DAY, calendar="XNYS")
    offered = refused.value.problems[0].remedy.rsplit(" ", 1)[-1]
    assert resolve(offered, date=DAY, calendar="XNYS") == pd.Timestamp("2026-11-01T06:30Z")


def test_a_bare_time_needs_a_session() -> None:
    with pytest.raises(InputError, match="no session of XNYS"):
        resolve("10:00", date=date(2026, 11, 26), calendar="XNYS")


def test_planning_time_is_now_but_not_before_the_open() -> None:
    opens = pd.Timestamp("2026-11-27T14:30Z")
    assert planning_time("XNYS", DAY, pd.Timestamp("2026-11-27T08:00Z")) == opens
    later = pd.Timestamp("2026-11-27T11:15-05:00")
    assert planning_time("XNYS", DAY, later) == later


def test_local_text_has_the_offset_in_force() -> None:
    zone = load_calendar("XLON").zone
    texts = [local_text(pd.Timestamp(t).value, zone) for t in ("2026-03-27T08Z", "2026-03-30T07Z")]
    assert texts == ["2026-03-27T08:00:00+00:00", "2026-03-30T08:00:00+01:00"]
