"""`calibrate` on trades and own fills: what is written, what plan makes of it, refusals."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest

from scheduler import plan
from scheduler.calibrate import calibrate
from scheduler.errors import InputError, MisuseError
from scheduler.history import slippage
from scheduler.settings import Settings
from scheduler.tables.estimates import read_estimates
from scheduler.tables.readings import read_readings
from scheduler.tables.settings_file import read_settings
from tests.executed_past import priced, read, slipped, tables
from tests.past import daily_bars
from tests.tapes import frame_of, market_frame, played

MARKET = market_frame()[["symbol", "price", "adv", "daily_vol", "calendar", "relaxation"]]


@pytest.fixture(autouse=True)
def _fewer_draws(monkeypatch):
    monkeypatch.setattr(slippage, "DRAWS", 39)


@pytest.fixture(scope="module")
def tape():
    return frame_of(played(3, sessions=10, share=0.0))


@pytest.fixture(scope="module")
def own():
    """Orders filled by another law than the default one."""
    made = tables(120, days=30)
    return priced(made, slipped(read(made), (0.8, 0.7, 0.5)))


def test_trades_make_readings_and_a_weight(tmp_path, tape):
    """Readings: one a relaxation volume; prices that never go back take the weight to about 0."""
    result = calibrate(trades=tape, market=MARKET)
    assert result.market is None
    assert len(result.readings) == 160
    assert result.readings["imbalance"].abs().max() <= 5.0
    weight = result.estimates["settings"]["reading_weight"]
    assert weight["told_apart"]
    assert weight["value"] < 0.5
    written = {path.name for path in result.write(tmp_path / "out")}
    assert written == {"readings.csv", "settings.toml", "estimates.json", "summary.json"}
    again = read_readings(tmp_path / "out" / "readings.csv")
    assert again["time"].tolist() == result.readings["time"].tolist()
    chosen = read_settings(tmp_path / "out" / "settings.toml").model
    assert chosen.reading_weight == pytest.approx(weight["value"], rel=1e-5)
    found = json.loads((tmp_path / "out" / "estimates.json").read_text())
    assert found["tapes"]["symbols"]["QUAY"]["signed"]["unsigned"] == 0.0
    assert found["tapes"]["findings"]["intervals"] == 159
    assert found["levels"] is None
    assert found["impact"] is None


def test_what_is_not_told_from_the_default_stays_a_comment(tmp_path):
    """A tape whose readings fade as the model says: weight 1 is the default."""
    trades = frame_of(played(4, sessions=10, share=1.3))
    result = calibrate(trades=trades, market=MARKET)
    assert not result.estimates["settings"]["reading_weight"]["told_apart"]
    result.write(tmp_path / "out")
    assert read_settings(tmp_path / "out" / "settings.toml") == Settings()
    assert "#reading_weight = " in result.settings_file
    assert "cannot be told from the default 1" in result.settings_file


def test_a_plan_takes_readings_and_settings(tmp_path, tape):
    """The last reading before the planning time counts, weighted as estimated."""
    calibrate(trades=tape, market=MARKET).write(tmp_path / "out")
    orders = pd.DataFrame(
        {"order_id": ["o-1"], "symbol": ["QUAY"], "side": ["buy"], "quantity": [20_000]}
    )
    chosen = read_settings(tmp_path / "out" / "settings.toml")
    options = {
        "date": "2026-01-20",
        "at": "2026-01-20T09:30",
        "readings": tmp_path / "out/readings.csv",
    }
    believed = plan(orders, MARKET, settings=Settings(), **options).schedule
    weighted = plan(orders, MARKET, settings=chosen, **options).schedule
    first = abs(believed["imbalance"].iat[0])
    assert abs(weighted["imbalance"].iat[0]) < first


def test_fills_make_an_impact_law(tmp_path, own):
    """Told from the default all together, and a plan uses the three."""
    orders, fills, market = own
    result = calibrate(fills=fills, orders=orders, market=market)
    impact = result.estimates["impact"]
    assert (impact["orders"], impact["days"]) == (120, 30)
    assert impact["impact_exponent"]["value"] == pytest.approx(0.7, abs=0.15)
    result.write(tmp_path / "out")
    model = read_settings(tmp_path / "out" / "settings.toml").model
    for name in slippage.NAMES:
        assert getattr(model, name) == pytest.approx(impact[name]["value"], rel=1e-5)


def test_an_open_question_is_a_note(own):
    """Orders alike: the note says that the law is drawn to publications."""
    made = tables(60, days=20, sizes=(0.05, 0.0501), minutes=(120.0, 120.1))
    orders, fills, market = priced(made, slipped(read(made), (1.414, 0.5, 0.05)))
    result = calibrate(fills=fills, orders=orders, market=market)
    assert any("do not tell impact coefficient, exponent and relaxation" in n for n in result.notes)
    assert "#impact_exponent = " in result.settings_file


def test_bars_trades_and_fills_in_one_run(tmp_path, own):
    """A market table given wins over the bars' for trades and fills; all files are written."""
    orders, fills, market = own
    trades = frame_of(played(5, sessions=5))
    table = pd.concat([market, MARKET.assign(symbol="REED", spread_bps=3.0)])
    result = calibrate(
        daily_bars(300),
        trades=trades.assign(symbol="REED"),
        fills=fills,
        orders=orders,
        market=table,
        lookback=280,
    )
    written = {path.name for path in result.write(tmp_path / "out")}
    assert written >= {"market.csv", "readings.csv", "settings.toml", "estimates.json"}
    assert set(result.estimates["settings"]) >= {"level_rate", *slippage.NAMES}
    known = read_estimates(tmp_path / "out" / "estimates.json")  # as a plan takes them
    assert {item.name for item in known.items} == set(result.estimates["settings"])
    assert result.summary["inputs"].keys() == {"bars", "trades", "fills", "orders", "market"}


def test_trades_alone_make_bars(tape):
    """Of 21 sessions or more: price, volume and volatility are those of the tape."""
    trades = frame_of(played(7, sessions=25)).iloc[::4]
    result = calibrate(trades=trades, lookback=24)
    row = result.market.iloc[0]
    assert row["price"] == trades["price"].iat[-1]
    assert row["adv"] == pytest.approx(1_024_000 / 4)
    assert result.profiles is not None
    assert len(result.readings) > 400
    with pytest.raises(InputError, match="usable close-to-close returns"):
        calibrate(trades=tape)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({}, "give bars, trades or fills"),
        ({"market": MARKET}, "give bars, trades or fills"),
        ({"fills": "f.csv", "market": MARKET}, "fills and orders belong together"),
        ({"orders": "o.csv", "trades": "t.csv"}, "fills and orders belong together"),
        ({"fills": "f.csv", "orders": "o.csv"}, "fills need a market table"),
    ],
)
def test_tables_that_are_nothing_without_others(given, words):
    with pytest.raises(MisuseError, match=words):
        calibrate(**given)


def test_a_tape_shorter_than_a_relaxation_volume_is_refused(tape):
    with pytest.raises(InputError) as caught:
        calibrate(trades=tape.head(40), market=MARKET)
    (problem,) = caught.value.problems
    assert problem.value == "QUAY"
    assert (
        "has at most 40,000 shares in sessions in a row, less than the relaxation" in problem.rule
    )


def test_a_short_tape_has_readings_and_says_what_is_missing(tape):
    result = calibrate(trades=tape.head(1024), market=MARKET)
    assert len(result.readings) == 16
    assert result.estimates["settings"] == {}
    assert any(note.startswith("tapes of 15 whole relaxation volumes") for note in result.notes)


def test_a_price_that_stands_still_has_readings_and_says_what_is_missing(tape):
    quiet = tape.drop(columns=["bid", "ask"], errors="ignore").assign(price=50.0)
    result = calibrate(trades=quiet, market=MARKET)
    assert "reading_weight" not in result.estimates["settings"]
    assert any("do not move: the model is not tested" in note for note in result.notes)


def test_every_table_is_read_before_anything_is_refused(tape, own):
    """Problems of trades and fills come together."""
    orders, fills, market = own
    with pytest.raises(InputError) as caught:
        calibrate(
            trades=tape.assign(quantity=0).head(2),
            fills=fills.assign(price=-1.0).head(3),
            orders=orders,
            market=market,
        )
    assert len(caught.value.problems) == 5


def test_trades_of_no_known_symbol_are_refused(tape):
    with pytest.raises(InputError, match="no trade in a session of a symbol"):
        calibrate(trades=tape.assign(symbol="MILL").head(10), market=MARKET)


def test_levels_told_from_their_default_change_what_k_is_on():
    """sigma_0 = sigma/sqrt(1 + 2 nu): with another nu the same slippage has another k."""
    made = tables(60, days=20)
    orders, fills, market = priced(made, slipped(read(made), (1.414, 0.5, 0.05), noise=0.05))
    other = Settings().with_values("model", level_rate=1.0)
    first, second = (
        calibrate(fills=fills, orders=orders, market=market, settings=rules).estimates["impact"]
        for rules in (Settings(), other)
    )
    ratio = np.sqrt(3.0 / 1.5)
    free = [each["without_publications"]["impact_coefficient"]["value"] for each in (first, second)]
    assert free[1] / free[0] == pytest.approx(ratio, rel=0.02)


def test_estimates_are_what_a_plan_takes_as_uncertainty(tmp_path, own):
    """The file as it is written: levels and the three figures of the law."""
    orders, fills, market = own
    result = calibrate(daily_bars(300), fills=fills, orders=orders, market=market, lookback=280)
    result.write(tmp_path / "out")
    order = pd.DataFrame(
        {"order_id": ["o-1"], "symbol": ["QUAY"], "side": ["buy"], "quantity": [20_000]}
    )
    when = {"date": "2026-03-05", "at": "2026-03-05T09:30"}
    planned = plan(order, market, uncertainty=tmp_path / "out/estimates.json", **when)
    doubts = planned.summary["orders"]["o-1"]["uncertainty"]
    cost = doubts["expected_cost_bps"]
    assert cost["low"] < cost["middle"] < cost["high"]
