"""Profiles: the built-in ones, those of a table, and how they lie on a market's hours."""

from __future__ import annotations

import math
from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

from scheduler.errors import InputError
from scheduler.sessions import BUILT_IN, Profile, Row, default_profile, profile_from_frame
from scheduler.sessions.builtin import built_in
from scheduler.sessions.calendar import Hours
from scheduler.sessions.curve import curve_of
from scheduler.sessions.profile import clock_text, seconds

H = 3600
NEW_YORK = Hours(9 * H + 1800, 16 * H)
TOKYO = Hours(9 * H, 15 * H + 1800, (11 * H + 1800, 12 * H + 1800))
SHORT = Hours(10 * H, 13 * H + 60)
COLUMNS = ["profile", "start", "end", "kind", "volume_share", "variance_share"]


def profile(*rows: Sequence[object], name: str = "mine") -> Profile:
    return profile_from_frame(pd.DataFrame([(name, *row) for row in rows], columns=COLUMNS), name)


@pytest.mark.parametrize("name", BUILT_IN)
@pytest.mark.parametrize("hours", [NEW_YORK, TOKYO, SHORT])
def test_built_in_profiles_fill_any_session(name: str, hours: Hours) -> None:
    """Rows follow one another from open to close and their shares add up to 1."""
    rows = built_in(name, hours).rows
    assert (rows[0].start, rows[-1].end) == (hours.open, hours.close)
    assert all(a.end == b.start for a, b in pairwise(rows))
    assert math.fsum(row.volume for row in rows) == pytest.approx(1.0, abs=1e-12)
    assert math.fsum(row.variance for row in rows) == pytest.approx(1.0, abs=1e-12)


def test_u_shape_has_the_shape_of_the_literature() -> None:
    """Volume: high, low at midday, rising (Heston, Korajczyk & Sadka 2010). Volatility: falls
    to the early afternoon, then rises a little (Lockwood & Linn 1990). Closing auction 7.5 % (US
    2018, Bogousslavsky & Muravyev 2023)."""
    rows = built_in("u-shape", NEW_YORK).rows
    opening, *day, closing = rows
    assert opening.auction
    assert closing.auction
    assert closing.volume == 0.075
    assert len(day) == 13
    for shares, low in (([r.volume for r in day], 7), ([r.variance for r in day], 8)):
        assert np.argmin(shares) == low
        assert np.all(np.diff(shares[: low + 1]) < 0)
        assert np.all(np.diff(shares[low:]) > 0)
    assert day[-1].variance < day[1].variance


@pytest.mark.parametrize("name", BUILT_IN)
def test_lunch_has_a_thirteenth_of_the_open_variance(name: str) -> None:
    """French & Roll 1986: at least 13 times less variance per closed hour than per open hour."""
    rows = built_in(name, TOKYO).rows
    lunch = next(row for row in rows if row.start == TOKYO.lunch[0])
    assert lunch.volume == 0.0
    per_open_minute = (1.0 - lunch.variance) / 330
    assert lunch.variance / 60 == pytest.approx(per_open_minute / 13)


def test_u_shape_needs_an_open_and_a_close() -> None:
    with pytest.raises(InputError, match="round the clock"):
        built_in("u-shape", Hours(0, 24 * H))
    assert default_profile("24/7") == default_profile("CMES") == "flat"
    assert default_profile("XTKS") == "u-shape"


def test_unknown_profiles() -> None:
    with pytest.raises(InputError, match="known: flat, u-shape"):
        built_in("v-shape", NEW_YORK)
    frame = pd.DataFrame([("steep", "09:30", "16:00", "continuous", 1.0, 1.0)], columns=COLUMNS)
    with pytest.raises(InputError, match="did you mean 'steep'"):
        profile_from_frame(frame, "steap")


def test_a_table_becomes_rows() -> None:
    """Clock texts with or without seconds, and 24:00, the end of the day."""
    assert profile(
        ("00:00", "12:00:30", "continuous", 0.25, 0.5), ("12:00:30", "24:00", "auction", 0.75, 0.0),
        ("24:00:00", "24:00:00", "auction", 0.0, 0.0), ("24:00", "24:01", "continuous", 0, 0.5),
    ).rows == (
        Row(0, 43230, False, 0.25, 0.5), Row(43230, 86400, True, 0.75, 0.0),
        Row(86400, 86400, True, 0.0, 0.0), Row(86400, 86460, False, 0.0, 0.5),
    )  # fmt: skip
    assert [clock_text(seconds(t)) for t in ("09:30:00", "16:00:05", "24:00")] == [
        "09:30", "16:00:05", "24:00",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("rows", "complaint"),
    [
        ([("09:30", "16:00", "continuous", 0.9, 1.0)], "volume_share.*add up to 0.9"),
        ([("09:30", "16:00", "continuous", 1.0, 0.9)], "variance_share.*add up to 0.9"),
        ([("09:30", "16:00", "continuous", math.nan, 1.0)], "add up to nan"),
        ([("16:00", "09:30", "continuous", 1.0, 1.0)], "ends before it starts"),
        ([("09:30", "09:30", "continuous", 1.0, 1.0)], "ends before it starts"),
        (
            [("09:30", "12:00", "continuous", 1.2, 1.0), ("12:00", "16:00", "continuous", -0.2, 0)],
            "negative share",
        ),
        (
            [("09:30", "16:00", "continuous", 0.9, 0.9), ("16:00", "16:00", "auction", 0.1, 0.1)],
            "auction 16:00-16:00 has a variance share",
        ),
    ],
)
def test_shares_that_are_no_shares(rows: list[tuple[object, ...]], complaint: str) -> None:
    with pytest.raises(InputError, match=complaint):
        profile(*rows)


@pytest.mark.parametrize(
    ("hours", "rows", "complaint"),
    [
        (NEW_YORK, [("08:00", "16:00", "continuous", 1, 1)], "08:00-16:00.*outside|outside"),
        (NEW_YORK, [("09:30", "17:00", "continuous", 1, 1)], "outside the normal session"),
        (NEW_YORK, [("10:00", "16:00", "continuous", 1, 1)], "no row for.*'09:30-10:00'"),
        (NEW_YORK, [("09:30", "15:00", "continuous", 1, 1)], "no row for.*'15:00-16:00'"),
        (
            NEW_YORK,
            [("09:30", "12:00", "continuous", 0.5, 1), ("12:30", "16:00", "continuous", 0.5, 0)],
            "no row for.*'12:00-12:30'",
        ),
        (
            NEW_YORK,
            [("09:30", "12:00", "continuous", 0.5, 1), ("11:00", "16:00", "continuous", 0.5, 0)],
            "overlaps the row 09:30-12:00",
        ),
        (
            TOKYO,
            [
                ("09:00", "11:30", "continuous", 0.5, 0.5),
                ("11:30", "12:30", "continuous", 0.1, 0.1),
                ("12:30", "15:30", "continuous", 0.4, 0.4),
            ],
            "volume in the lunch break of the session 09:00-11:30 and 12:30-15:30",
        ),
    ],
)
def test_a_profile_has_to_fit_the_market(
    hours: Hours, rows: list[tuple[object, ...]], complaint: str
) -> None:
    with pytest.raises(InputError, match=complaint) as refused:
        curve_of(profile(*rows), hours)
    assert {problem.source for problem in refused.value.problems} == {"profiles"}


def test_every_misfit_is_reported_at_once() -> None:
    with pytest.raises(InputError) as refused:
        curve_of(profile(("08:00", "15:00", "continuous", 1, 1)), NEW_YORK)
    assert len(refused.value.problems) == 2


def test_a_row_over_lunch_trades_beside_it_and_varies_through_it() -> None:
    """10:00-13:30 in Tokyo: its volume in 150 open minutes, 60/210 of its variance in lunch."""
    curve = curve_of(
        profile(
            ("09:00", "10:00", "continuous", 0.4, 0.4),
            ("10:00", "13:30", "continuous", 0.5, 0.42),
            ("13:30", "15:30", "continuous", 0.1, 0.18),
        ),
        TOKYO,
    )
    at = dict(
        zip(curve.knots.tolist(), zip(curve.volume, curve.variance, strict=True), strict=True)
    )
    start, end = TOKYO.lunch
    assert at[start] == pytest.approx((0.4 + 0.5 * 90 / 150, 0.4 + 0.42 * 90 / 210))
    assert at[end] == pytest.approx((0.4 + 0.5 * 90 / 150, 0.4 + 0.42 * 150 / 210))
    assert curve.stretches == ((9 * H, start), (end, 15 * H + 1800))


def test_rows_need_not_speak_of_lunch() -> None:
    curve = curve_of(
        profile(
            ("09:00", "11:30", "continuous", 0.5, 0.6), ("12:30", "15:30", "continuous", 0.5, 0.4)
        ),
        TOKYO,
    )
    assert curve.knots.tolist() == [9 * H, 11 * H + 1800, 12 * H + 1800, 15 * H + 1800]
    assert curve.variance.tolist() == pytest.approx([0.0, 0.6, 0.6, 1.0])


def test_an_auction_covers_the_time_it_interrupts() -> None:
    """A midday auction, long or instant, splits continuous trading in two."""
    for end in ("12:00", "12:05"):
        curve = curve_of(
            profile(
                ("09:30", "12:00", "continuous", 0.4, 0.5),
                ("12:00", end, "auction", 0.2, 0.0),
                (end, "16:00", "continuous", 0.4, 0.5),
            ),
            NEW_YORK,
        )
        assert curve.stretches == ((9 * H + 1800, 12 * H), (seconds(end), 16 * H))


def test_late_clock_times_of_an_overnight_session_are_the_evening_before() -> None:
    curve = curve_of(
        profile(
            ("17:00", "24:00", "continuous", 0.2, 0.1), ("00:00", "17:00", "continuous", 0.8, 0.9)
        ),
        Hours(-7 * H, 17 * H),
    )
    assert curve.knots.tolist() == [-7 * H, 0, 17 * H]
