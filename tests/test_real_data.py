"""Daily bars of three real stocks through calibrate to plan, and the promised risk against history.

Prices are not adjusted (Quandl WIKI, public domain, carried by bokeh_sampledata); none of the three
was split from 2006 to 2013.
"""

from __future__ import annotations

from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from scheduler import Plan, Settings, calibrate, plan
from tests.desk import row_of, slices

SYMBOLS = ("AAPL", "IBM", "MSFT")


@pytest.fixture(scope="module")
def bars() -> pd.DataFrame:
    from bokeh_sampledata import stocks

    frames = [pd.DataFrame(getattr(stocks, symbol)).assign(symbol=symbol) for symbol in SYMBOLS]
    every = pd.concat(frames, ignore_index=True).rename(columns={"date": "time"})
    return every[every["time"] >= "2006"].drop(columns="adj_close")


def _orders(market: pd.DataFrame, part: float, **columns: object) -> pd.DataFrame:
    """A part of a day's volume in each symbol: two buys and a sell."""
    quantity = np.floor(part * market["adv"])
    names = {"order_id": [f"{s}-1" for s in market["symbol"]], "symbol": market["symbol"]}
    return pd.DataFrame({**names, "quantity": quantity}).assign(
        side=["buy", "sell", "buy"], **columns
    )


def _planned(bars: pd.DataFrame, last: str, day: date, part: float) -> Plan:
    market = calibrate(bars[bars["time"] <= last]).market
    urgent = Settings().with_values("plan", urgency=0.3)
    return plan(_orders(market, part), market, settings=urgent, date=day, at="09:30")


def test_from_files_to_a_plan(bars: pd.DataFrame, tmp_path: Path) -> None:
    """Bars written out, calibrated, its market table read again as it is, planned, written."""
    past = tmp_path / "bars.csv"
    bars[bars["time"] <= "2013-03-01"].to_csv(past, index=False)
    calibrate(past).write(tmp_path / "market")
    table = pd.read_csv(tmp_path / "market" / "market.csv")
    orders = tmp_path / "orders.csv"
    _orders(table, 0.02).to_csv(orders, index=False)
    result = plan(orders, tmp_path / "market" / "market.csv", date=date(2013, 3, 4), at="09:30")
    result.write(tmp_path / "out")
    written = pd.read_csv(tmp_path / "out" / "schedule.csv").groupby("order_id")["shares"].sum()
    assert (written[[f"{s}-1" for s in SYMBOLS]] == np.floor(0.02 * table["adv"]).to_numpy()).all()
    assert {c["status"] for c in result.certificate.values()} == {"proven"}
    assert any("market data from 2013-03-01" in note for note in result.notes)


@pytest.mark.parametrize(
    ("last", "day"),
    [("2007-02-27", date(2007, 2, 28)), ("2008-10-10", date(2008, 10, 13))],
)
def test_quiet_and_wild_days_are_planned(bars: pd.DataFrame, last: str, day: date) -> None:
    """Optimal, better than its rivals, and dearer the more of the day's volume is asked for.

    Impact of the square-root kind: no more than sigma sqrt(Q/ADV) times a number of order one.
    """
    costs = []
    for part in (0.001, 0.01, 0.1):
        result = _planned(bars, last, day, part)
        market = calibrate(bars[bars["time"] <= last]).market.set_index("symbol")
        for symbol in SYMBOLS:
            figures = row_of(result, f"{symbol}-1")
            assert figures["certificate"]["status"] != "local"
            assert figures["certificate"]["gap"] < 1e-7
            for rival in ("evenly_timed", "volume_proportional"):
                assert figures["objective"] < figures[rival]["objective"] * (1.0 + 1e-4)
            scale = 1e4 * market.loc[symbol, "daily_vol"] * np.sqrt(part)
            assert 0.1 * scale < figures["expected_cost_bps"] < 2.0 * scale
            assert slices(result, f"{symbol}-1")["participation"].max() < 0.2501
        costs.append(result.summary["total"]["expected_cost_bps"])
    assert costs == sorted(costs)


def test_a_wild_market_is_traded_faster(bars: pd.DataFrame) -> None:
    """In October 2008 a tenth of the volume carries more risk than in February 2007.

    Both in basis points of its own notional, at the same price of risk.
    """
    quiet = _planned(bars, "2007-02-26", date(2007, 2, 27), 0.05)
    wild = _planned(bars, "2008-10-10", date(2008, 10, 13), 0.05)
    for symbol in SYMBOLS:
        calm, storm = (row_of(result, f"{symbol}-1") for result in (quiet, wild))
        assert storm["cost_std_bps"] > 1.5 * calm["cost_std_bps"]
        assert storm["expected_cost_bps"] > 1.5 * calm["expected_cost_bps"]


def test_the_promised_risk_is_that_of_history(bars: pd.DataFrame) -> None:
    """Costs of small patient orders over three sessions, over what was promised for each.

    Priced at the mean of each day's open, high, low and close against the first open, 25 windows
    of three stocks from 2006 to 2013, calibrated on the sessions before each.
    """
    dates = sorted(bars["time"].unique())
    history = bars.set_index(["symbol", "time"])
    patient = Settings().with_values("plan", urgency=0.0, bucket=390.0)
    ratios = []
    for at in np.linspace(80, len(dates) - 5, 25).astype(int):
        market = calibrate(bars[bars["time"].between(dates[at - 75], dates[at - 1])]).market
        days = dates[at : at + 3]
        orders = _orders(market, 1e-3, start=f"{days[0]}T09:30", end=f"{days[-1]}T16:00")
        first = date.fromisoformat(days[0])
        result = plan(orders, market, settings=patient, date=first, at="09:30")
        for symbol, side in zip(SYMBOLS, (1, -1, 1), strict=True):
            rows = slices(result, f"{symbol}-1")
            shares = rows["shares"].groupby(rows["start"].str[:10]).sum()
            assert shares.index.tolist() == days
            own = history.loc[symbol].loc[days]
            mean = own[["open", "high", "low", "close"]].mean(axis=1)
            moved = side * float(shares @ (mean / own["open"].iat[0] - 1.0)) / shares.sum()
            ratios.append(1e4 * moved / row_of(result, f"{symbol}-1")["cost_std_bps"])
    assert np.std(ratios) == pytest.approx(1.0, abs=0.3)
    assert abs(np.mean(ratios)) < 0.3
    assert np.mean(np.abs(ratios) > 3.0) < 0.05
