"""`calibrate` on intraday bars: session sums, and the shape of the day."""

from __future__ import annotations

from datetime import date

import numpy as np
import pandas as pd
import pytest

from scheduler.calibrate import calibrate
from scheduler.plan import plan
from scheduler.sessions import build_grid, profile_from_frame
from tests.past import intraday_bars, u_shape

VOLUME = u_shape(78, 3.0)
VARIANCE = u_shape(78, 2.0)
LAST = date(2026, 2, 27)


def quarter_hours(shares: np.ndarray) -> np.ndarray:
    return shares.reshape(-1, 3).sum(axis=1)


def column(result, name, kind="continuous"):
    frame = result.profiles
    return frame.loc[frame["kind"] == kind, name].to_numpy()


def flat_bars(**options):
    return intraday_bars(40, np.full(78, 1 / 78), np.full(78, 1 / 78), **options)


def test_a_known_u_shape_is_recovered():
    """Quarter-hours of five-minute bars, 60 sessions: within four standard errors of each share."""
    result = calibrate(intraday_bars(61, VOLUME, VARIANCE))
    profile = result.profiles
    assert profile["start"].tolist()[:2] == ["09:30:00", "09:45:00"]
    assert (profile["end"].iat[-1], len(profile)) == ("16:00:00", 26)
    assert (profile["profile"] == "QUAY-day").all()
    assert (profile["kind"] == "continuous").all()
    sessions = 59  # without the half days of 2025-12-24 and 2025-11-28
    even = 1 / 26
    for name, truth, error in (
        ("volume_share", quarter_hours(VOLUME), 0.3 / np.sqrt(3 * sessions)),
        ("variance_share", quarter_hours(VARIANCE), np.sqrt(2 / (3 * sessions))),
    ):
        found = profile[name].to_numpy()
        expected = (sessions * truth + even) / (sessions + 1)
        assert found.sum() == pytest.approx(1.0, abs=1e-12)
        assert np.abs(found / expected - 1.0).max() < 4.0 * error
        assert np.corrcoef(found, truth)[0, 1] > 0.9


def test_session_figures_are_sums_of_bars():
    """Price, adv and volatility of intraday bars equal those of the daily bars they make."""
    bars = intraday_bars(61, VOLUME, VARIANCE, auction=0.08)
    groups = bars.groupby(bars["time"].dt.date)
    daily = groups.agg(
        symbol=("symbol", "first"),
        open=("open", "first"),
        high=("high", "max"),
        low=("low", "min"),
        close=("close", "last"),
        volume=("volume", "sum"),
    )
    daily = daily.rename_axis("time").reset_index()
    columns = ["symbol", "price", "adv", "daily_vol", "as_of"]
    fine, coarse = calibrate(bars), calibrate(daily)
    pd.testing.assert_frame_equal(fine.market[columns], coarse.market[columns])
    found, expected = (result.summary["symbols"]["QUAY"] for result in (fine, coarse))
    for name in expected:
        same = expected[name] if isinstance(expected[name], str) else pytest.approx(expected[name])
        assert found[name] == same
    assert (fine.market["profile"].tolist(), coarse.profiles) == (["QUAY-day"], None)


def test_half_days_and_incomplete_sessions_are_left_out_of_the_profile():
    """Whatever their bars say; the notes name them."""
    bars = intraday_bars(61, VOLUME, VARIANCE)
    day = bars["time"].dt.date.astype(str)
    cut = bars[(day != "2026-01-12") | (bars["time"].dt.hour < 11)]
    expected = calibrate(cut)
    (half, few) = expected.notes
    assert half == "not full sessions, left out of adv and profiles: 2025-12-24"
    assert few == "QUAY: few bars or other hours, left out of the profile: 2026-01-12"
    loud = cut.copy()
    loud.loc[day.isin(["2025-12-24", "2026-01-12"]), "volume"] *= 100
    pd.testing.assert_frame_equal(calibrate(loud).profiles, expected.profiles)


def test_the_bar_at_the_close_is_the_auction():
    """Its share is 0.08/1.08, up to the trimming of the rest; it has no variance, no length."""
    result = calibrate(flat_bars(auction=0.08))
    last = result.profiles.iloc[-1]
    assert last[["start", "end", "kind"]].tolist() == ["16:00:00", "16:00:00", "auction"]
    assert last["volume_share"] == pytest.approx(0.08 / 1.08, rel=0.01)
    assert last["variance_share"] == 0.0
    assert (result.profiles["kind"] == "auction").sum() == 1
    assert column(result, "variance_share").sum() == pytest.approx(1.0, abs=1e-12)


def test_a_still_bar_before_the_close_is_no_auction():
    """Only the time tells: a last bar without range is continuous trading."""
    bars = flat_bars()
    final = bars["time"].dt.strftime("%H:%M") == "15:55"
    for name in ("high", "low", "close"):
        bars.loc[final, name] = bars.loc[final, "open"]
    assert (calibrate(bars).profiles["kind"] == "continuous").all()


def test_bars_before_the_open_and_after_the_auction_are_left_out():
    """Extended hours change nothing but a note."""
    bars = flat_bars(auction=0.08)
    extended = [bars]
    for clock in ("09:25", "16:15", "19:55"):
        at = bars["time"].dt.normalize().drop_duplicates() + pd.Timedelta(f"{clock}:00")
        extended.append(bars.loc[at.index].assign(time=at, volume=10**7))
    result, expected = calibrate(pd.concat(extended)), calibrate(bars)
    pd.testing.assert_frame_equal(result.market, expected.market)
    pd.testing.assert_frame_equal(result.profiles, expected.profiles)
    assert result.notes[0].startswith("120 of ")
    assert "outside the sessions of XNYS and left out" in result.notes[0]


def test_local_times_and_times_with_offset_mean_the_same():
    """Across a change of the clocks: in UTC the session begins an hour earlier or later."""
    bars = flat_bars(last="2025-11-20", auction=0.05)
    expected = calibrate(bars)
    bars["time"] = bars["time"].dt.tz_localize("America/New_York").dt.tz_convert("UTC")
    result = calibrate(bars)
    pd.testing.assert_frame_equal(result.market, expected.market)
    pd.testing.assert_frame_equal(result.profiles, expected.profiles)


def test_no_interval_is_without_a_share():
    """A symbol that trades in its first bar only still has a curve that is positive throughout."""
    bars = flat_bars()
    first = bars["time"].dt.strftime("%H:%M") == "09:30"
    bars.loc[~first, "volume"] = 0
    price = bars["close"].where(first).ffill()
    for name in ("open", "high", "low", "close"):
        bars.loc[~first, name] = price[~first]
    profile = calibrate(bars).profiles
    assert profile["volume_share"].iat[0] > 0.95
    assert profile["variance_share"].iat[0] > 0.95
    assert (profile[["volume_share", "variance_share"]] > 0.0).all(axis=None)


def test_one_wild_session_hardly_moves_the_curve():
    """The averages are trimmed: a hundredfold bar of one session is as if it were not there."""
    bars = intraday_bars(61, VOLUME, VARIANCE)
    before = calibrate(bars).profiles
    at = bars.index[bars["time"] == pd.Timestamp("2026-01-14 12:00")]
    bars.loc[at, "volume"] *= 100
    bars.loc[at, "high"] *= 1.3
    bars.loc[at, "close"] *= 1.3
    bars.loc[at + 1, ["open", "high"]] *= 1.3
    after = calibrate(bars).profiles
    for name in ("volume_share", "variance_share"):
        assert after[name].to_numpy() == pytest.approx(before[name], rel=0.15)


@pytest.mark.parametrize(
    ("calendar", "step", "count", "options", "starts", "rows"),
    [
        ("XNYS", 1, 390, {"auction": 0.1}, "09:30", 26 + 1),
        ("XNYS", 10, 39, {}, "09:30", 20),  # two bars an interval, the last one alone
        ("XNYS", 30, 13, {}, "09:30", 13),
        ("XTKS", 5, 78, {"last": "2026-02-27"}, "09:00", 10 + 1 + 12),
        ("XLON", 15, 34, {"auction": 0.2, "auction_wait": 5}, "08:00", 34 + 1),
        ("24/7", 60, 24, {}, "00:00", 24),
    ],
)
def test_the_profile_fits_its_market(calendar, step, count, options, starts, rows):
    """Lunch, auctions after the close, odd lengths, no close: the sessions take every one."""
    shares = np.full(count, 1 / count)
    bars = intraday_bars(25, shares, shares, calendar=calendar, step=step, **options)
    if calendar == "XTKS":
        clock = bars["time"].dt.strftime("%H:%M")
        bars = bars[(clock < "11:30") | (clock >= "12:30")]
    result = calibrate(bars, calendar=calendar)
    assert result.profiles["start"].iat[0] == f"{starts}:00"
    assert len(result.profiles) == rows
    profile = profile_from_frame(result.profiles, "QUAY-day")
    grid, notes = build_grid(calendar, profile, date=LAST, bucket=15.0, overnight_share=0.0)
    assert notes == ()
    assert grid.volume.sum() == pytest.approx(1.0, abs=1e-9)
    assert grid.variance.sum() == pytest.approx(1.0, abs=1e-9)


def test_the_lunch_break_is_a_row_with_variance_only():
    """What the price did over lunch is neither the morning's nor the afternoon's."""
    shares = np.full(78, 1 / 78)
    bars = intraday_bars(41, shares, shares, calendar="XTKS")
    clock = bars["time"].dt.strftime("%H:%M")
    bars = bars[(clock <= "11:30") | (clock >= "12:30")]  # eleven of 78 bars are the break
    profile = calibrate(bars, calendar="XTKS").profiles.set_index("start")
    assert profile.loc["11:30:00", "end"] == "12:30:00"
    assert profile.loc["11:30:00", "volume_share"] == 0.0
    error = np.sqrt(2 / 40)
    assert profile.loc["11:30:00", "variance_share"] == pytest.approx(11 / 78, rel=4 * error)
    # The bar that begins with the break is the last print of the morning.
    last, next_one = profile.loc["11:15:00"], profile.loc["12:30:00"]
    assert last["volume_share"] / next_one["volume_share"] == pytest.approx(4 / 3, rel=0.1)
    assert next_one["variance_share"] == pytest.approx(3 / 78, rel=4 * error / np.sqrt(3))


def test_bars_on_the_hour_are_cut_where_the_market_is_closed():
    """Tokyo's bars of 11:00 and 12:00 trade for half an hour each, New York's of 9:00 too."""
    shares = np.full(13, 1 / 13)
    for calendar, clocks in (
        ("XNYS", ["09:30", "10:00", "11:00", "12:00", "13:00", "14:00", "15:00"]),
        ("XTKS", ["09:00", "10:00", "11:00", "11:30", "12:30", "13:00", "14:00", "15:00"]),
    ):
        bars = intraday_bars(41, shares, shares, calendar=calendar, step=30)
        if calendar == "XTKS":
            bars = bars[~bars["time"].dt.strftime("%H:%M").isin(["11:30", "12:00"])]
        ohlcv = {"symbol": "first", "open": "first", "high": "max", "low": "min"}
        ohlcv |= {"close": "last", "volume": "sum"}
        hourly = bars.groupby(bars["time"].dt.floor("h").rename("time")).agg(ohlcv)
        profile = calibrate(hourly.reset_index(), calendar=calendar).profiles
        assert profile["start"].tolist() == [f"{clock}:00" for clock in clocks]
        length = pd.to_timedelta(profile["end"]) - pd.to_timedelta(profile["start"])
        rate = (profile["volume_share"] / length.dt.total_seconds()).to_numpy()
        traded = np.delete(rate, 3) if calendar == "XTKS" else rate  # without lunch
        assert traded.max() / traded.min() < 1.25


def test_too_few_full_sessions_give_no_profile():
    """Tokyo's close moved to 15:30 on 2024-11-05: three sessions later there is no curve yet."""
    shares = np.full(78, 1 / 78)
    bars = intraday_bars(30, shares, shares, calendar="XTKS", last="2024-11-07")
    result = calibrate(bars, calendar="XTKS")
    assert result.profiles is None
    assert result.market["profile"].tolist() == [None]
    assert result.notes[0] == "QUAY: no profile: 3 full sessions of bars, 5 are needed"


def test_a_plan_takes_the_tables():
    """Market and profiles as they come, without a warning."""
    bars = intraday_bars(41, VOLUME, VARIANCE, auction=0.08)
    found = calibrate(bars)
    order = {"order_id": ["o-1"], "symbol": ["QUAY"], "side": ["buy"], "quantity": [20000]}
    result = plan(pd.DataFrame(order), found.market, profiles=found.profiles, date=LAST, at="09:30")
    assert result.schedule["shares"].sum() == 20000
    assert result.schedule["expected_volume"].sum() == pytest.approx(found.market["adv"].iat[0])
