"""The grid of a window: which stages there are, when, and with which shares."""

from __future__ import annotations

from datetime import date
from typing import Any

import numpy as np
import pandas as pd
import pytest

from scheduler.errors import InputError
from scheduler.sessions import Grid, Kind, Profile, Row, build_grid

FULL = date(2026, 11, 25)
HALF = date(2026, 11, 27)
MONDAY = date(2026, 11, 30)
SHARE = 0.1875
H = 3600

# A session with auctions that last: calls 09:25-09:30, 12:00-12:05 and 16:00-16:10.
CALLS = Profile(
    "calls",
    (
        Row(9 * H + 1500, 9 * H + 1800, True, 0.05, 0.0),
        Row(9 * H + 1800, 12 * H, False, 0.35, 0.6),
        Row(12 * H, 12 * H + 300, True, 0.1, 0.0),
        Row(12 * H + 300, 16 * H, False, 0.3, 0.4),
        Row(16 * H, 16 * H + 600, True, 0.2, 0.0),
    ),
)
# Tokyo as it trades: the closing call lies inside the session.
TOKYO = Profile(
    "tokyo",
    (
        Row(9 * H, 11 * H + 1800, False, 0.5, 0.5),
        Row(12 * H + 1800, 15 * H + 1500, False, 0.4, 0.5),
        Row(15 * H + 1500, 15 * H + 1800, True, 0.1, 0.0),
    ),
)


def grid(calendar: str, profile: Profile | str, day: date, **options: Any) -> Grid:
    return build(calendar, profile, day, **options)[0]


def build(
    calendar: str, profile: Profile | str, day: date, **options: Any
) -> tuple[Grid, tuple[str, ...]]:
    for name in ("start", "end", "at"):
        if name in options:
            options[name] = pd.Timestamp(options[name])
    options = {"bucket": 30.0, "overnight_share": SHARE, **options}
    return build_grid(calendar, profile, date=day, **options)


def spans(g: Grid) -> list[str]:
    """Stages as 'C 09:30 10:00'."""
    return [
        f"{Kind(kind).name[:2]} {start[11:16]} {end[11:16]}"
        for kind, start, end in zip(g.kind, g.local_start, g.local_end, strict=True)
    ]


def refusal(*args: Any, **options: Any) -> str:
    with pytest.raises(InputError) as refused:
        build(*args, **options)
    assert all(problem.row is None for problem in refused.value.problems)
    return str(refused.value)


def test_a_full_session() -> None:
    """13 half-hours between an opening and a closing auction that are instants."""
    g = grid("XNYS", "u-shape", FULL)
    assert len(g) == 15
    assert spans(g)[:2] == ["AU 09:30 09:30", "CO 09:30 10:00"]
    assert spans(g)[-2:] == ["CO 15:30 16:00", "AU 16:00 16:00"]
    assert g.local_start[0] == "2026-11-25T09:30:00-05:00"
    assert g.volume.sum() == pytest.approx(1.0)
    assert g.variance.sum() == pytest.approx(1.0 - SHARE)
    assert g.volume[[0, -1]].tolist() == [0.01, 0.075]
    assert g.variance[g.auction].tolist() == [0.0, 0.0]
    assert g.time_zero == np.datetime64("2026-11-25T14:30")
    assert not g.session.any()
    assert not g.overnight.any()
    assert g.open.all()
    assert g.start.dtype == g.end.dtype == np.dtype("datetime64[ns]")


def test_a_half_day_is_cut_and_not_rescaled() -> None:
    """27 November 2026 closes at 13:00: 210 of 390 minutes, and the closing auction moves."""
    flat = grid("XNYS", "flat", HALF)
    assert flat.volume.sum() == pytest.approx(210 / 390)
    assert flat.variance.sum() == pytest.approx((1 - SHARE) * 210 / 390)
    curved, full = grid("XNYS", "u-shape", HALF), grid("XNYS", "u-shape", FULL)
    assert spans(curved)[-2:] == ["CO 12:30 13:00", "AU 13:00 13:00"]
    assert np.allclose(curved.volume[:-1], full.volume[:8])
    assert curved.volume[-1] == full.volume[-1]


def test_half_day_of_a_market_with_lasting_calls() -> None:
    """The closing call moves to the early close; the midday call stays; nothing else does."""
    g = grid("XNYS", CALLS, HALF)
    assert spans(g)[-3:] == ["CO 12:05 12:35", "CO 12:35 13:00", "AU 13:00 13:10"]
    assert spans(g)[0] == "AU 09:25 09:30"
    assert "AU 12:00 12:05" in spans(g)
    assert g.volume.sum() == pytest.approx(0.05 + 0.35 + 0.1 + 0.3 * 55 / 235 + 0.2)


def test_a_midday_call_after_an_early_close_is_cut_out() -> None:
    """London closes at 12:30 on 24 December 2026; a call at 13:00 does not happen."""
    rows = (
        Row(8 * H, 13 * H, False, 0.5, 0.5),
        Row(13 * H, 13 * H, True, 0.2, 0.0),
        Row(13 * H, 16 * H + 1800, False, 0.3, 0.5),
    )
    g = grid("XLON", Profile("midday", rows), date(2026, 12, 24))
    assert not g.auction.any()
    assert g.volume.sum() == pytest.approx(0.5 * 270 / 300)


def test_a_closing_call_inside_the_session_stays_inside_it() -> None:
    """Continuous trading ends where the call begins, also on a half day."""
    g = grid("XTKS", TOKYO, FULL)
    assert spans(g)[-2:] == ["CO 15:00 15:25", "AU 15:25 15:30"]
    rows = (
        Row(9 * H + 1800, 15 * H + 3000, False, 0.9, 1.0),
        Row(15 * H + 3000, 16 * H, True, 0.1, 0.0),
    )
    half = grid("XNYS", Profile("inside", rows), HALF)
    assert spans(half)[-2:] == ["CO 12:30 12:50", "AU 12:50 13:00"]


def test_lunch_is_a_closed_period_of_its_own_session() -> None:
    """Buckets restart after lunch; lunch has variance and no volume, and is not overnight."""
    g = grid("XTKS", "u-shape", FULL, bucket=40.0)
    assert spans(g)[1:6] == [
        "CO 09:00 09:40",
        "CO 09:40 10:20",
        "CO 10:20 11:00",
        "CO 11:00 11:30",
        "CL 11:30 12:30",
    ]
    assert spans(g)[6] == "CO 12:30 13:10"
    (lunch,) = np.flatnonzero(~g.open)
    assert g.volume[lunch] == 0.0
    open_minute = (1 - 60 / 13 / (330 + 60 / 13)) / 330
    assert g.variance[lunch] == pytest.approx((1 - SHARE) * open_minute * 60 / 13)
    assert not g.overnight.any()
    assert g.volume.sum() == pytest.approx(1.0)
    assert g.variance.sum() == pytest.approx(1.0 - SHARE)


def test_hong_kong_half_day_has_no_lunch() -> None:
    g = grid("XHKG", "flat", date(2026, 12, 24))
    assert g.open.all()
    assert spans(g)[-1] == "CO 11:30 12:00"
    assert g.volume.sum() == pytest.approx(150 / 330)


def test_a_session_moved_as_a_whole_takes_its_curve_along() -> None:
    """Seoul opens and closes an hour late on the day of the university entrance exam."""
    moved = grid("XKRX", "u-shape", date(2020, 12, 3))
    usual = grid("XKRX", "u-shape", date(2020, 12, 2))
    assert spans(moved)[0] == "AU 10:00 10:00"
    assert spans(moved)[-1] == "AU 16:30 16:30"
    assert np.allclose(moved.volume, usual.volume)
    assert np.allclose(moved.variance, usual.variance)


def test_a_late_open_cuts_the_start_and_moves_the_opening_auction() -> None:
    """Seoul opens at 10:00 on the first session of 2024 and closes as usual."""
    late = grid("XKRX", "u-shape", date(2024, 1, 2))
    usual = grid("XKRX", "u-shape", date(2024, 1, 3))
    assert spans(late)[0] == "AU 10:00 10:00"
    assert late.volume[0] == usual.volume[0]
    assert np.allclose(late.volume[1:], usual.volume[3:])
    assert late.volume.sum() < 1.0


def test_a_weekend_is_one_overnight() -> None:
    """Friday (half day) to Monday: one closed period with one overnight share, Monday's."""
    g = grid("XNYS", "flat", HALF, end="2026-11-30T21:00Z", bucket=60.0)
    (night,) = np.flatnonzero(g.overnight)
    assert g.kind[night] == Kind.CLOSED
    assert g.variance[night] == SHARE
    assert g.volume[night] == 0.0
    assert (g.local_start[night], g.local_end[night]) == (
        "2026-11-27T13:00:00-05:00",
        "2026-11-30T09:30:00-05:00",
    )
    assert g.session.tolist() == [0] * night + [1] * (len(g) - night)
    assert g.variance[g.session == 1].sum() == pytest.approx(1.0)


def test_three_sessions_have_two_overnights() -> None:
    g = grid("XNYS", "u-shape", date(2026, 12, 1), end="2026-12-03T21:00Z")
    assert g.overnight.sum() == 2
    assert g.session.max() == 2
    assert g.volume.sum() == pytest.approx(3.0)
    assert g.variance.sum() == pytest.approx(3.0 - SHARE)


def test_clocks_change_within_a_window() -> None:
    """London keeps 08:00-16:30 over the weekend of 28 March 2026; UTC moves by an hour."""
    g = grid("XLON", "flat", date(2026, 3, 27), end="2026-03-30T15:30Z", bucket=255.0)
    assert spans(g) == [
        "CO 08:00 12:15",
        "CO 12:15 16:30",
        "CL 16:30 08:00",
        "CO 08:00 12:15",
        "CO 12:15 16:30",
    ]
    assert g.start[3] - g.start[0] == np.timedelta64(3 * 24 - 1, "h")
    assert np.allclose(g.volume, [0.5, 0.5, 0.0, 0.5, 0.5])


def test_round_the_clock_has_no_closed_period() -> None:
    """All variance is open variance, whatever the overnight share."""
    g = grid("24/7", "flat", date(2026, 11, 27), end="2026-11-30T00:00Z", bucket=360.0)
    assert len(g) == 12
    assert g.open.all()
    assert np.allclose(g.variance, 0.25)
    assert g.session.tolist() == np.repeat([0, 1, 2], 4).tolist()


def test_sessions_without_a_pause_have_no_overnight() -> None:
    """Chicago futures run on from Tuesday to Wednesday; only Monday has a weekend before it."""
    g = grid("CMES", "flat", date(2026, 12, 7), end="2026-12-08T23:00Z", bucket=1440.0)
    assert spans(g) == ["CO 17:00 17:00", "CO 17:00 17:00"]
    assert np.allclose(g.variance, [1 - SHARE, 1.0])


def test_a_window_inside_buckets_integrates_their_parts() -> None:
    g = grid("XNYS", "flat", FULL, start="2026-11-25T10:10-05:00", end="2026-11-25T11:05-05:00")
    assert spans(g) == ["CO 10:10 10:30", "CO 10:30 11:00", "CO 11:00 11:05"]
    assert np.allclose(g.volume, np.array([20, 30, 5]) / 390)
    assert g.time_zero == np.datetime64("2026-11-25T15:10")


def test_cuts_split_buckets_and_change_no_total() -> None:
    cuts = tuple(pd.Timestamp(f"2026-11-25T{t}-05:00") for t in ("10:10", "10:30", "20:00"))
    g = grid("XNYS", "flat", FULL, cuts=cuts)
    assert spans(g)[1:4] == ["CO 10:00 10:10", "CO 10:10 10:30", "CO 10:30 11:00"]
    assert len(g) == 14
    assert g.volume.sum() == pytest.approx(1.0)


def test_planning_time_is_a_later_start() -> None:
    """A planning time before the open, or before the start, changes nothing."""
    late = build("XNYS", "flat", FULL, at="2026-11-25T12:00-05:00")
    assert spans(late[0])[0] == "CO 12:00 12:30"
    assert late[1] == ()
    whole = grid("XNYS", "u-shape", FULL, at="2026-11-25T07:00-05:00")
    assert spans(whole) == spans(grid("XNYS", "u-shape", FULL))


def test_the_end_of_a_start_on_a_later_day_is_that_days() -> None:
    g = grid("XNYS", "u-shape", HALF, start="2026-11-30T15:00-05:00")
    assert spans(g) == ["CO 15:00 15:30", "CO 15:30 16:00", "AU 16:00 16:00"]
    assert g.local_start[0].startswith("2026-11-30")


@pytest.mark.parametrize(
    ("start", "end", "auctions"),
    [
        (None, None, ["09:25", "12:00", "16:00"]),
        ("09:30", "16:10", ["09:25", "12:00", "16:00"]),
        ("09:30:01", "16:09:59", ["12:00"]),
        ("09:30:01", "16:00", ["12:00"]),
        ("12:03", "16:10", ["12:00", "16:00"]),
        ("12:06", None, ["16:00"]),
        (None, "12:04", ["09:25"]),
        ("16:05", "16:10", ["16:00"]),
        ("16:10", "16:10", ["16:00"]),
    ],
)
def test_an_auction_is_in_where_its_end_is(
    start: str | None, end: str | None, auctions: list[str]
) -> None:
    """And then with all its volume."""
    ends = {"start": start, "end": end}
    g = grid("XNYS", CALLS, FULL, **{k: f"{FULL}T{t}-05:00" for k, t in ends.items() if t})
    assert [g.local_start[i][11:16] for i in np.flatnonzero(g.auction)] == auctions
    volume = {"09:25": 0.05, "12:00": 0.1, "16:00": 0.2}
    assert g.volume[g.auction].tolist() == [volume[name] for name in auctions]


def test_closed_time_at_either_end_is_no_part_of_the_window() -> None:
    """From Wednesday's evening over Thanksgiving to Friday's night: Friday's session, noted."""
    g, notes = build(
        "XNYS", "flat", HALF, start="2026-11-25T20:00-05:00", end="2026-11-27T20:00-05:00"
    )
    assert g.open.all()
    assert g.variance.sum() == pytest.approx((1 - SHARE) * 210 / 390)
    assert g.time_zero == np.datetime64("2026-11-27T14:30")
    assert notes == (
        "start 2026-11-25T20:00:00-05:00 is before trading: clipped to 2026-11-27T09:30:00-05:00",
        "end 2026-11-27T20:00:00-05:00 is after trading: clipped to 2026-11-27T13:00:00-05:00",
    )


def test_a_window_from_lunch_to_lunch() -> None:
    """Only the night between is closed time; sessions count from the first that trades."""
    g = grid("XTKS", "flat", FULL, start="2026-11-25T12:00+09:00", end="2026-11-26T12:00+09:00")
    assert np.flatnonzero(~g.open).tolist() == np.flatnonzero(g.overnight).tolist() == [6]
    assert (spans(g)[0], spans(g)[-1]) == ("CO 12:30 13:00", "CO 11:00 11:30")
    assert set(g.session.tolist()) == {0, 1}


def test_from_a_closing_auction_over_night() -> None:
    """An auction alone may be the first session; sessions before its lunch play no part."""
    g = grid("XTKS", TOKYO, FULL, start="2026-11-25T15:30+09:00", end="2026-11-26T09:30+09:00")
    assert spans(g) == ["AU 15:25 15:30", "CL 15:30 09:00", "CO 09:00 09:30"]
    assert g.session.tolist() == [0, 1, 1]
    after = grid("XNYS", CALLS, FULL, start="2026-11-25T16:05-05:00", end="2026-11-27T10:00-05:00")
    assert spans(after) == ["AU 16:00 16:10", "CL 16:10 09:25", "AU 09:25 09:30", "CO 09:30 10:00"]
    assert after.time_zero == np.datetime64("2026-11-25T21:05")


def test_windows_that_hold_nothing() -> None:
    """Each says what is wrong, with the hours of the date asked for."""
    at = "2026-11-25T{}-05:00".format
    assert "before start" in refusal("XNYS", "flat", FULL, start=at("12:00"), end=at("11:00"))
    assert "is empty" in refusal("XNYS", "flat", FULL, start=at("12:00"), end=at("12:00"))
    assert "is empty" in refusal("XNYS", "flat", FULL, end=at("08:00"))
    late = {"start": "2026-11-27T14:00-05:00", "end": "2026-11-27T15:00-05:00"}
    outside = refusal("XNYS", "flat", HALF, **late)
    assert "2026-11-27T09:30:00-05:00 to 2026-11-27T13:00:00-05:00" in outside
    noon = {"start": "2026-11-25T11:45+09:00", "end": "2026-11-25T12:15+09:00"}
    lunch = refusal("XTKS", "flat", FULL, **noon)
    assert "T09:00:00+09:00 to 2026-11-25T11:30" in lunch
    assert "time is over" in refusal("XNYS", "flat", FULL, end=at("12:00"), at=at("12:30"))
    assert "time is over" in refusal("XNYS", "flat", FULL, end=at("12:00"), at=at("12:00"))
    assert "time is over" in refusal("XNYS", "flat", FULL, at=at("17:00"))


def test_other_refusals() -> None:
    assert "next one is 2026-11-27" in refusal("XNYS", "flat", date(2026, 11, 26))
    assert "outside the known" in refusal("XNYS", "flat", FULL, start="2090-01-01T10:00Z")
    assert "outside the known" in refusal("XNYS", "flat", FULL, end="2090-01-01T10:00Z")
    assert "no built-in profile" in refusal("XNYS", "u", FULL)
    assert "no row for this part" in refusal("XLON", CALLS, FULL)
    for bucket in (0.0, -5.0, float("nan"), float("inf")):
        assert "must be positive" in refusal("XNYS", "flat", FULL, bucket=bucket)
    assert "no time zone" in refusal("XNYS", "flat", FULL, start="2026-11-25T10:00")


def test_grids_are_shared_and_cannot_be_changed() -> None:
    first, again = grid("XNYS", "flat", MONDAY), grid("XNYS", "flat", MONDAY)
    assert first is again
    with pytest.raises(ValueError, match="read-only"):
        first.volume[0] = 1.0
