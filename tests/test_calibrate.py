"""`calibrate` on daily bars: figures, jumps, refusals."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import scheduler
from scheduler.calibrate import FEWEST_RETURNS, calibrate
from scheduler.errors import InputError, MisuseError, OutputError
from scheduler.settings import Settings
from scheduler.tables import market
from tests.past import daily_bars, intraday_bars, split, u_shape


def real_bars(first: str, last: str, *symbols: str) -> pd.DataFrame:
    """Daily bars of real stocks, prices not adjusted (Quandl WIKI, public domain)."""
    from bokeh_sampledata import stocks

    frames = [pd.DataFrame(getattr(stocks, symbol)).assign(symbol=symbol) for symbol in symbols]
    bars = pd.concat(frames, ignore_index=True).rename(columns={"date": "time"})
    return bars[(bars["time"] >= first) & (bars["time"] <= last)].drop(columns="adj_close")


def row(result, symbol="QUAY"):
    return result.market.set_index("symbol").loc[symbol]


def notes_on(result, symbol="QUAY"):
    return [note for note in result.notes if note.startswith(symbol)]


def problems(bars, **options):
    with pytest.raises(InputError) as caught:
        calibrate(bars, **options)
    return caught.value.problems


# --- figures


@pytest.mark.parametrize("symbol", ["AAPL", "IBM", "MSFT"])
def test_figures_of_real_bars_equal_an_independent_computation(symbol):
    """The last 60 sessions to 2013-03-01, computed by pandas and scipy; 2012-12-24 closed early."""
    from scipy.stats import trim_mean

    bars = real_bars("2012-01-01", "2013-03-01", "AAPL", "IBM", "MSFT")
    found = row(calibrate(bars), symbol)
    own = bars[bars["symbol"] == symbol].tail(61)
    volume = own.loc[own["time"] != "2012-12-24", "volume"]
    returns = np.log(own["close"].astype(float)).diff().dropna()
    assert found["price"] == own["close"].iat[-1]
    assert found["adv"] == pytest.approx(trim_mean(volume, 0.05), rel=1e-12)
    assert found["daily_vol"] == pytest.approx(np.sqrt((returns**2).mean()), rel=1e-12)
    assert found["daily_vol"] == pytest.approx(returns.std(), rel=0.03)
    assert (found["calendar"], found["as_of"]) == ("XNYS", "2013-03-01")
    assert found[["currency", "profile"]].isna().all()


def test_the_summary_says_what_each_figure_rests_on():
    """Returns, full sessions, first and last date; the overnight share of the variance."""
    bars = real_bars("2012-01-01", "2013-03-01", "IBM")
    result = calibrate(bars, lookback=100)
    own = bars.tail(101).reset_index(drop=True)
    night = np.log(own["open"] / own["close"].shift()).dropna() ** 2
    day = np.log(own["close"] / own["open"])[1:] ** 2
    figures = result.summary["symbols"]["IBM"]
    assert figures["overnight_share"] == pytest.approx(night.sum() / (night.sum() + day.sum()))
    assert result.summary["total"]["overnight_share"] == figures["overnight_share"]
    assert (figures["first"], figures["as_of"]) == (own["time"].iat[0], "2013-03-01")
    early = {"2012-11-23", "2012-12-24"}  # the market closed at 13:00
    assert early < set(own["time"])
    assert (figures["returns"], figures["full_sessions"]) == (100, 99)
    assert result.notes == (
        "not full sessions, left out of adv and profiles: 2012-11-23, 2012-12-24",
    )
    assert (result.summary["schema"], result.summary["lookback"]) == (1, 100)


def test_a_known_random_walk_is_recovered():
    """2 % a day, a fifth of its variance overnight: within four standard errors of 2,000 days."""
    result = calibrate(daily_bars(2001, vol=0.02, night=0.2), lookback=2000)
    assert row(result)["daily_vol"] == pytest.approx(0.02, rel=4 / np.sqrt(2 * 2000))
    share_error = 0.2 * 0.8 * np.sqrt(2 / 2000 + 2 / 2000)
    assert result.summary["total"]["overnight_share"] == pytest.approx(0.2, abs=4 * share_error)


def test_a_wild_volume_hardly_moves_adv():
    """The trimmed mean drops it; a plain mean would be over ten times as large."""
    bars = daily_bars()
    before = row(calibrate(bars))["adv"]
    bars.loc[30, "volume"] *= 1000
    assert row(calibrate(bars))["adv"] == pytest.approx(before, rel=0.02)
    assert bars["volume"].mean() > 10 * before


def test_only_the_sessions_looked_back_on_count():
    """Older bars change nothing."""
    bars = daily_bars(90)
    bars.loc[:28, "volume"] *= 50
    recent = calibrate(bars.tail(61)).market
    pd.testing.assert_frame_equal(calibrate(bars).market, recent)
    assert row(calibrate(bars, lookback=89))["adv"] > 5 * recent["adv"].iat[0]


def test_round_the_clock_there_is_no_night():
    """On calendar 24/7 every date is a session and no overnight share is given."""
    bars = daily_bars(31)
    bars["time"] = [f"2026-01-{day:02d}" for day in range(1, 32)]
    result = calibrate(bars, calendar="24/7")
    assert result.summary["symbols"]["QUAY"]["overnight_share"] is None
    assert result.summary["total"]["overnight_share"] is None
    assert result.notes == ()


# --- splits, bad prices, holes


def test_a_known_split_is_found_reported_and_left_out():
    """AAPL split 2 for 1 on 2005-02-28: volatility without that return, volumes in new shares."""
    from scipy.stats import trim_mean

    bars = real_bars("2004-01-01", "2005-04-15", "AAPL")
    result = calibrate(bars)
    (note,) = notes_on(result, "AAPL")
    assert note.startswith("AAPL: 2005-02-28 opens at 0.502 times the close before")
    assert "2 new shares for one" in note
    own = bars.tail(61)
    before = own["time"] < "2005-02-28"
    returns = np.log(own["close"]).diff()[(own["time"] != "2005-02-28")].dropna()
    volume = own["volume"].where(~before, 2 * own["volume"])
    found = row(result, "AAPL")
    assert len(returns) == result.summary["symbols"]["AAPL"]["returns"] == 59
    assert found["daily_vol"] == pytest.approx(np.sqrt((returns**2).mean()), rel=1e-12)
    assert found["adv"] == pytest.approx(trim_mean(volume, 0.05), rel=1e-12)
    assert found["price"] == own["close"].iat[-1]


def test_all_splits_of_thirteen_years_and_nothing_else():
    """The three on record (2000-06-21, 2005-02-28; 2003-02-18); the fall of 2000-09-29 counts.

    That day AAPL closed at less than half the price of the day before: a move of the market that
    is near a split's ratio.
    """
    result = calibrate(real_bars("2000-03-01", "2013-03-01", "AAPL", "IBM", "MSFT"), lookback=3300)
    splits = [note.split(" opens")[0] for note in result.notes if "split," in note]
    assert splits == ["AAPL: 2000-06-21", "AAPL: 2005-02-28", "MSFT: 2003-02-18"]
    large = [note for note in notes_on(result, "AAPL") if "large moves that count" in note]
    assert len(large) == 1
    assert "2000-09-29 (-52%)" in large[0]


@pytest.mark.parametrize("ratio", [1.5, 2.0, 3.0, 10.0, 1 / 2, 1 / 4, 2 / 3])
def test_splits_either_way(ratio):
    """The figures are those of the adjusted past less one return."""
    bars = daily_bars(61, vol=0.01)
    plain, found = calibrate(bars), calibrate(split(bars, 40, ratio))
    (note,) = notes_on(found)
    assert f"{bars['time'].iat[40]} opens at" in note
    assert f"{ratio:.4g} new shares for one" in note
    assert row(found)["adv"] == pytest.approx(row(plain)["adv"], rel=1e-9)
    returns = np.log(bars["close"]).diff().drop(40).dropna()
    assert row(found)["daily_vol"] == pytest.approx(np.sqrt((returns**2).mean()), rel=1e-9)


def test_a_fall_by_half_within_the_session_is_no_split():
    """The open is where the close was: the market moved, and it counts."""
    bars = daily_bars(vol=0.01)
    bars.loc[40:, ["low", "close"]] /= 2
    bars.loc[41:, ["open", "high"]] /= 2
    wide = Settings().with_values("checks", max_daily_vol=1.0)
    result = calibrate(bars, settings=wide)
    (note,) = notes_on(result)
    assert "large moves that count" in note
    assert f"{bars['time'].iat[40]} (-5" in note
    assert row(result)["daily_vol"] > 0.08


def test_an_open_at_half_in_a_wild_session_is_no_split():
    """The price swings by half within that session: news, though the open is at a split's ratio."""
    bars = daily_bars(vol=0.01)
    ratio = bars["close"].iat[39] / 2 / bars["open"].iat[40]
    bars.loc[40:, ["open", "high", "low", "close"]] *= ratio
    bars.loc[40, "high"] *= 1.5
    result = calibrate(bars)
    (note,) = notes_on(result)
    assert "large moves that count" in note
    assert bars["time"].iat[40] in note


@pytest.mark.parametrize("wrong", [["high", "close"], ["open", "high", "low", "close"]])
def test_a_bad_price_is_found_reported_and_left_out(wrong):
    """A slip of the decimal point: the returns to and from it do not count; it is no split."""
    bars = daily_bars()
    bars.loc[40, wrong] *= 10
    result = calibrate(bars)
    (note,) = notes_on(result)
    assert bars["time"].iat[40] in note
    assert "taken for a bad price" in note
    returns = np.log(bars["close"]).diff().drop([40, 41]).dropna()
    assert row(result)["daily_vol"] == pytest.approx(np.sqrt((returns**2).mean()), rel=1e-12)
    assert result.summary["symbols"]["QUAY"]["returns"] == 58


def test_a_bar_that_contradicts_itself_is_refused_with_its_row():
    """A price of 0, a high below the low: nothing is estimated from such a file."""
    bars = daily_bars()
    bars.loc[3, "low"] = 0.0
    bars.loc[5, "high"] = bars.loc[5, "low"] / 2
    found = problems(bars)
    assert {problem.row for problem in found} == {5, 7}


def test_missing_sessions_are_reported_and_returns_across_them_left_out():
    """Two sessions without a bar; one return spans them."""
    bars = daily_bars().drop([20, 21])
    result = calibrate(bars)
    (note,) = notes_on(result)
    assert note.startswith("QUAY: sessions without a bar, returns across them are left out: ")
    assert note.endswith(", ".join(daily_bars()["time"].iloc[20:22]))
    assert result.summary["symbols"]["QUAY"]["returns"] == 57


def test_sessions_without_volume_are_reported():
    """They count as they are."""
    bars = daily_bars()
    bars.loc[[7, 8], "volume"] = 0
    (note,) = notes_on(calibrate(bars))
    assert note.startswith("QUAY: sessions without volume, which count as they are: ")
    assert note.endswith(", ".join(bars["time"].iloc[7:9]))


def test_bars_outside_the_sessions_are_left_out_and_said():
    """A Saturday and a holiday: not sessions of the market."""
    bars = daily_bars()
    more = bars.tail(2).assign(time=["2026-02-14", "2026-02-16"])
    result = calibrate(pd.concat([bars, more]))
    assert result.notes[:1] == (
        "2 of 63 bars are outside the sessions of XNYS and left out; the first, in row 63, is "
        "QUAY at 2026-02-14T00:00:00",
    )
    pd.testing.assert_frame_equal(result.market, calibrate(bars).market)


def test_times_beyond_all_calendars_are_left_out():
    """No year is so far off that it is more than a note."""
    bars = daily_bars()
    more = bars.tail(3).assign(time=["0001-01-01T00:30+09:00", "1500-01-02", "9999-12-31"])
    result = calibrate(pd.concat([bars, more]))
    assert result.notes[0].startswith("3 of 64 bars are outside the sessions of XNYS")
    pd.testing.assert_frame_equal(result.market, calibrate(bars).market)


# --- times


@pytest.mark.parametrize(
    "stamp",
    ["{}T00:00", "{}T00:00Z", "{}T00:00-05:00", "{}T16:00", "{}T21:00Z", "{}T09:30:00-05:00"],
)
def test_daily_bars_belong_to_their_date(stamp):
    """Midnight is the date as written, whatever the offset; other times are converted."""
    bars = daily_bars()
    expected = calibrate(bars)
    bars["time"] = [stamp.format(date) for date in bars["time"]]
    result = calibrate(bars)
    pd.testing.assert_frame_equal(result.market, expected.market)
    assert result.notes == expected.notes


def test_rows_in_any_order():
    """Symbols keep the order in which they first come; bars are put in order."""
    bars = pd.concat([daily_bars(symbol="WEIR", seed=3), daily_bars(seed=4)])
    mixed = bars.sample(frac=1.0, random_state=5)
    first = calibrate(bars).market
    assert first["symbol"].tolist() == ["WEIR", "QUAY"]
    found = calibrate(mixed).market.set_index("symbol").loc[["WEIR", "QUAY"]].reset_index()
    pd.testing.assert_frame_equal(found, first, check_dtype=False)


def test_one_time_written_twice_is_refused():
    """With and without offset it would count twice: daily bars by session, others by instant."""
    flat = np.full(78, 1 / 78)
    intraday = intraday_bars(25, flat, flat)
    intraday["time"] = [time.isoformat() for time in intraday["time"]]
    for bars, again in (
        (daily_bars(), "2026-02-27T21:00:00Z"),
        (intraday, "2026-02-27T20:55:00Z"),
    ):
        (problem,) = problems(pd.concat([bars, bars.tail(1).assign(time=again)]))
        assert (problem.row, problem.column) == (len(bars) + 2, "time")
        assert "is the same time" in problem.rule


# --- refusals


def test_too_few_returns_are_refused_with_what_is_needed():
    """Every symbol that lacks some is named at once; 20 returns are enough."""
    long = daily_bars(FEWEST_RETURNS + 1)
    short = [daily_bars(n, symbol=name) for name, n in (("MILL", 20), ("WEIR", 3), ("SILT", 1))]
    assert len(calibrate(long).market) == 1
    found = problems(pd.concat([long, *short]))
    assert [problem.value for problem in found] == ["MILL", "WEIR", "SILT"]
    assert [problem.rule.split(" usable")[0] for problem in found] == ["has 19", "has 2", "has 0"]
    assert all("at least 21 sessions in a row" in problem.remedy for problem in found)
    assert {problem.source for problem in found} == {"bars"}


def test_prices_that_never_move_are_refused():
    """Volatility 0 is an error of the data, not an estimate."""
    bars = daily_bars()
    bars[["open", "high", "low", "close"]] = 50.0
    (problem,) = problems(bars)
    assert problem.value == "QUAY"
    assert problem.rule == "has the same close in all 61 sessions: its volatility is 0"


def test_no_volume_is_refused():
    """An adv of 0 is none that can be planned with."""
    (problem,) = problems(daily_bars().assign(volume=0))
    assert problem.rule == "trades nothing in most sessions"


def test_a_volatility_that_no_market_table_can_hold_is_refused():
    """Above the bound of the settings, which can be raised; above the lower one it is noted."""
    (problem,) = problems(daily_bars(vol=0.4))
    assert "above 0.25" in problem.rule
    assert "unadjusted splits" in problem.remedy
    wide = Settings().with_values("checks", max_daily_vol=1.0)
    result = calibrate(daily_bars(vol=0.4), settings=wide)
    assert result.notes[-1].startswith("market: daily_vol above 0.1")


def test_a_symbol_without_a_bar_in_a_session_is_refused():
    """It would vanish silently from the table otherwise."""
    away = daily_bars(2, symbol="WEIR").assign(time=["2026-02-14", "2026-02-15"])
    (problem,) = problems(pd.concat([daily_bars(), away]))
    assert (problem.value, problem.rule) == ("WEIR", "has no bar in a session of XNYS")


def test_an_unknown_calendar_and_a_short_lookback_are_refused():
    """Each names what is allowed."""
    (problem,) = problems(daily_bars(), calendar="XNYX")
    assert "no known exchange calendar" in problem.rule
    with pytest.raises(MisuseError, match="lookback must be at least 20 sessions, not 19"):
        calibrate(daily_bars(), lookback=19)


def test_a_local_time_that_comes_twice_is_refused():
    """01:30 on the night when the clocks go back; with its offset it is clear."""
    flat = np.full(78, 1 / 78)
    bars = intraday_bars(21, flat, flat, last="2025-11-10").astype({"time": object})
    bars["time"] = [time.isoformat() for time in bars["time"]]
    night = bars.tail(1).assign(time="2025-11-02T01:30")
    (problem,) = problems(pd.concat([bars, night]))
    assert problem.row == len(bars) + 2
    assert "comes twice or never in America/New_York" in problem.rule
    assert len(calibrate(pd.concat([bars, night.assign(time="2025-11-02T01:30-04:00")])).market)


# --- out again


def test_the_tables_read_back(tmp_path):
    """What is written passes the checks of its own tables, and is what was found."""
    shape = u_shape(78, 3.0)
    bars = pd.concat(
        [daily_bars(symbol="flat"), intraday_bars(21, shape, shape, symbol="QUAY", auction=0.1)]
    )
    result = calibrate(bars)
    paths = result.write(tmp_path / "out")
    assert [path.name for path in paths] == [
        "market.csv",
        "profiles.csv",
        "settings.toml",
        "estimates.json",
        "summary.json",
    ]
    read = scheduler.read_market(tmp_path / "out" / "market.csv")
    columns = ["symbol", "price", "adv", "daily_vol", "calendar", "profile", "as_of"]
    pd.testing.assert_frame_equal(read[columns], result.market[columns])
    profiles = scheduler.read_profiles(tmp_path / "out" / "profiles.csv")
    assert profiles["profile"].unique().tolist() == ["QUAY-day"]
    pd.testing.assert_frame_equal(profiles, result.profiles, rtol=1e-12)


def test_daily_bars_write_no_profiles(tmp_path):
    """There is nothing to say about the day."""
    result = calibrate(daily_bars())
    assert result.profiles is None
    written = {path.name for path in result.write(tmp_path)}
    assert written == {"market.csv", "settings.toml", "estimates.json", "summary.json"}


def test_nothing_is_written_where_something_is_in_the_way(tmp_path):
    """A file in the place of the directory: an error, and the file as it was."""
    (tmp_path / "out").write_text("mine")
    with pytest.raises(MisuseError, match="is a file"):
        calibrate(daily_bars()).write(tmp_path / "out")
    with pytest.raises(OutputError, match="cannot write"):
        calibrate(daily_bars()).write(tmp_path / "out" / "below")
    assert [path.name for path in tmp_path.iterdir()] == ["out"]
    assert (tmp_path / "out").read_text() == "mine"


def test_the_package_gives_the_function_however_its_module_came_in():
    """`scheduler.calibrate` is the verb, also after its module of that name has been imported."""
    from scheduler import calibrate as first
    from scheduler import calibrate as second

    assert first is second is calibrate
    assert scheduler.Calibration is type(calibrate(daily_bars()))


def test_as_of_is_a_date_or_empty():
    """The market table keeps it as ISO text; a time is refused."""
    table = {"symbol": ["QUAY"], "price": [5], "adv": [1e6], "daily_vol": [0.02]}
    for given, kept in (
        ("2026-02-27", "2026-02-27"),
        (pd.Timestamp("2026-02-27"), "2026-02-27"),
        ("", None),
    ):
        frame = pd.DataFrame({**table, "as_of": [given]})
        assert market.ensure(frame).frame["as_of"].tolist() == [kept]
    for given, rule in (("2026-02-27T10:00", "is a time"), ("27.2.2026", "is no ISO 8601 time")):
        with pytest.raises(InputError) as caught:
            market.ensure(pd.DataFrame({**table, "as_of": [given]}))
        assert [problem.rule for problem in caught.value.problems] == [rule]


# energy levels


def test_levels_of_all_symbols_are_in_the_summary() -> None:
    """Pooled in units of each symbol's own volatility; known truth is covered; said in a note."""
    rng = np.random.default_rng(4)
    frames = []
    days = pd.bdate_range("2025-09-02", "2026-02-27").strftime("%Y-%m-%d")
    for symbol, vol in (("QUAY", 0.01), ("MILL", 0.03), ("WEIR", 0.02)):
        levels = rng.poisson(0.25, len(days))
        moves = vol * np.sqrt((1.0 + 2.0 * levels) / 1.5) * rng.standard_normal(len(days))
        close = 50.0 * np.exp(np.cumsum(moves))
        prices = dict.fromkeys(("open", "high", "low", "close"), close)
        frames.append(pd.DataFrame({"symbol": symbol, "time": days, **prices, "volume": 1e6}))
    result = calibrate(pd.concat(frames), lookback=120)
    found = result.summary["levels"]
    low, high = found["level_rate_interval"]
    assert low <= 0.25 <= high
    assert found["ground_vol_interval"][0] <= np.sqrt(1 / 1.5) <= found["ground_vol_interval"][1]
    assert found["returns"] > 300
    assert any(note.startswith("energy levels of") for note in result.notes)
    assert calibrate(frames[0], lookback=60).summary["levels"] is None
