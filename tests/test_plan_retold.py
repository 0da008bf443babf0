"""The same task told otherwise is the same plan: mirrored, split, in other money or files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler import Plan, Settings, plan
from tests.desk import DAY, Row, name, planned, random_desk, row_of, slices, task

seeds = st.integers(0, 2**32 - 1)
urgencies = st.sampled_from([0.0, 0.2, 1.0])
some = settings(max_examples=5, deadline=None)

MONEY = ("expected_cost", "impact", "spread", "fees", "cost_std", "objective", "notional")
RIVALS = ("evenly_timed", "volume_proportional")


def _same_slices(one: Plan, other: Plan, factor: float = 1.0, within: float = 0.0) -> None:
    """Order by order, whatever order they come in."""
    for order in one.summary["orders"]:
        apart = slices(other, order)["shares"] - factor * slices(one, order)["shares"]
        assert apart.abs().max() <= within


def _same_money(one: Plan, other: Plan, factor: float = 1.0) -> None:
    for order in one.summary["orders"]:
        first, second = row_of(one, order), row_of(other, order)
        unit = 1e-9 * factor * first["notional"]
        for key in MONEY:
            assert second[key] == pytest.approx(factor * first[key], rel=1e-7, abs=unit)
        for rival in RIVALS:
            for key in ("expected_cost", "cost_std"):
                expected = pytest.approx(factor * first[rival][key], rel=1e-7, abs=unit)
                assert second[rival][key] == expected


def _readings(market: list[Row], sign: float, seed: int) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    values = sign * np.round(rng.uniform(-1.0, 1.0, len(market)), 3)
    return pd.DataFrame({"symbol": [row["symbol"] for row in market], "imbalance": values})


@given(seeds, urgencies)
@some
def test_a_buy_and_a_sell_mirror_each_other(seed: int, urgency: float) -> None:
    """With readings negated, what the market sees changes its sign and nothing else does."""
    orders, market = random_desk(seed, most=3)
    for row in market:
        row |= {"buy_fee_bps": 0.7, "sell_fee_bps": 0.7}
    turned = [o | {"side": "sell" if o["side"] == "buy" else "buy"} for o in orders]
    one = planned(orders, market, urgency=urgency, readings=_readings(market, 1.0, seed))
    other = planned(turned, market, urgency=urgency, readings=_readings(market, -1.0, seed))
    _same_slices(one, other)
    _same_money(one, other)
    for seen in ("imbalance", "displacement_bps"):
        assert (other.schedule[seen] == -one.schedule[seen]).all()


@given(seeds, urgencies)
@some
def test_a_share_split_doubles_the_slices_and_keeps_the_money(seed: int, urgency: float) -> None:
    """Two for one: quantity, ADV and lot doubled; price and fee per share halved."""
    orders, market = random_desk(seed, most=3)
    market = [row | {"fee_per_share": 0.002} for row in market]
    double = [row | {"quantity": 2 * row["quantity"]} for row in orders]
    halved = [
        row
        | {key: 2 * row[key] for key in ("adv", "lot_size")}
        | {"price": row["price"] / 2, "fee_per_share": 0.001}
        for row in market
    ]
    one = planned(orders, market, urgency=urgency)
    other = planned(double, halved, urgency=urgency)
    _same_slices(one, other, factor=2.0)
    _same_money(one, other)


@given(seeds)
@some
def test_money_is_in_base_currency(seed: int) -> None:
    """Prices in yen at 0.0065 dollars each: the dollar figures of the same prices in dollars."""
    orders, market = random_desk(seed, most=3)
    yen = [
        row | {"price": row["price"] / 0.0065, "currency": "JPY", "fx": 0.0065, "fee_per_share": 2}
        for row in market
    ]
    dollars = [row | {"currency": "USD", "fee_per_share": 2 * 0.0065} for row in market]
    base = Settings().with_values("cost", base_currency="USD").with_values("plan", urgency=0.4)
    frames = [pd.DataFrame(rows) for rows in (orders, yen, dollars)]
    one = plan(frames[0], frames[2], settings=base, date=DAY, at="09:30")
    other = plan(frames[0], frames[1], settings=base, date=DAY, at="09:30")
    _same_slices(one, other, within=10.0)  # a lot, where rounding meets a tie
    _same_money(one, other)
    assert one.summary["currency"] == other.summary["currency"] == "USD"


def test_price_alone_changes_money_in_proportion_and_nothing_else() -> None:
    """Basis points and slices stay, in any price and by any impact law."""
    for law in ("imbalance", "rate-power", "root-lasting"):
        cheap = planned(task(), name(price=0.5, spread_bps=3), impact_law=law)
        dear = planned(task(), name(price=5e5, spread_bps=3), impact_law=law)
        _same_slices(cheap, dear, within=1.0)
        for key in ("expected_cost_bps", "cost_std_bps"):
            assert row_of(dear)[key] == pytest.approx(row_of(cheap)[key], rel=1e-6)
        _same_money(cheap, dear, factor=1e6)


@given(seeds, st.randoms(use_true_random=False))
@some
def test_rows_in_another_order_are_the_same_orders(seed: int, shuffle: object) -> None:
    """Of the orders and of the market table; the schedule keeps the order of the orders."""
    orders, market = random_desk(seed, most=6)
    permuted, other_market = orders.copy(), market.copy()
    shuffle.shuffle(permuted)  # type: ignore[attr-defined]
    shuffle.shuffle(other_market)  # type: ignore[attr-defined]
    one, other = planned(orders, market), planned(permuted, other_market)
    _same_slices(one, other, within=10.0)
    _same_money(one, other)
    assert list(other.summary["orders"]) == [row["order_id"] for row in permuted]
    assert other.schedule["order_id"].drop_duplicates().tolist() == list(other.summary["orders"])


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_files_and_frames_are_the_same(tmp_path: Path, suffix: str) -> None:
    """Written out and read, the tables give the same plan; only the inputs' names differ."""
    orders, market = random_desk(3)
    orders = [row | {"start": "10:00", "must_complete": True} for row in orders]
    tables = {
        "orders": pd.DataFrame(orders),
        "market": pd.DataFrame(market),
        "readings": _readings(market, 1.0, 3),
    }
    paths = {key: tmp_path / f"{key}.{suffix}" for key in tables}
    for key, frame in tables.items():
        frame.to_csv(paths[key], index=False) if suffix == "csv" else frame.to_parquet(paths[key])
    one = plan(tables["orders"], tables["market"], readings=tables["readings"], date=DAY, at="9:30")
    other = plan(paths["orders"], paths["market"], readings=paths["readings"], date=DAY, at="9:30")
    pd.testing.assert_frame_equal(one.schedule, other.schedule, check_exact=True)
    assert other.summary["inputs"] == {key: str(path) for key, path in paths.items()}
    for plan_ in (one, other):
        plan_.summary.pop("inputs")
        for figures in plan_.summary["orders"].values():
            figures["certificate"].pop("seconds")
    assert one.summary == other.summary


def test_the_callers_frames_are_left_alone() -> None:
    orders, market = (pd.DataFrame([row]) for row in (task(), name()))
    before = orders.copy(), market.copy()
    plan(orders, market, date=DAY, at="09:30")
    pd.testing.assert_frame_equal(orders, before[0])
    pd.testing.assert_frame_equal(market, before[1])


def test_a_setting_of_the_model_is_a_column_of_the_market() -> None:
    """relaxation, impact_coefficient and impact_exponent; the table wins where it speaks."""
    chosen = {"relaxation": 0.2, "impact_coefficient": 1.0, "impact_exponent": 0.6}
    by_table = planned(task(), name(**chosen))
    by_setting = planned(task(), name(), **chosen)
    assert by_table.schedule.equals(by_setting.schedule)
    rows = [task(symbol="A"), task(symbol="B")]
    both = planned(rows, [name("A", relaxation=0.05), name("B")], relaxation=0.2)
    plain, slow = planned(rows[0], name("A")), planned(rows[1], name("B"), relaxation=0.2)
    assert (slices(both, "A-1")["shares"] - slices(plain, "A-1")["shares"]).abs().max() <= 1
    assert (slices(both, "B-1")["shares"] - slices(slow, "B-1")["shares"]).abs().max() <= 1
