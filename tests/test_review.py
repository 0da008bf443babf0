"""What came of a plan: chance told from the rest, prices and parts by hand, refusals."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.stats import kstest

from scheduler import InputError, MisuseError, Plan, Settings
from scheduler import plan as make
from scheduler.figures import Figures
from scheduler.review import Review, review
from scheduler.shortfall.chance import holm
from scheduler.shortfall.columns import AS_PLANNED, AS_TRADED
from scheduler.shortfall.parts import EXECUTION, PARTS
from scheduler.tables import fills as fills_table
from scheduler.tables import orders as orders_table
from tests.desk import DAY, name, planned, task
from tests.filled import on_plan
from tests.fortune import dealt_by_the_model
from tests.listed import RISK, TIES, listed

MANY = 400


@cache
def many() -> Plan:
    """Orders alone, in symbols of their own, over one or two sessions."""
    rng = np.random.default_rng(5)
    orders, market = [], []
    for number in range(MANY):
        symbol = f"S{number}"
        side = "buy" if number % 2 else "sell"
        window = {"end": "2026-03-06T11:00"} if number % 4 == 0 else {}
        quantity = float(rng.integers(2_000, 60_000))
        orders.append(task(quantity, symbol=symbol, side=side) | window)
        vol = round(float(rng.uniform(0.01, 0.04)), 4)
        market.append(name(symbol, daily_vol=vol, spread_bps=4.0, buy_fee_bps=0.5))
    return planned(orders, market, urgency=0.3, bucket=30.0)


@cache
def fair() -> Review:
    """All of them as the model deals."""
    return review(many(), dealt_by_the_model(many(), 1))


def one_order(**columns: Any) -> Plan:
    return planned(task(40_000, **columns), name(spread_bps=4.0), urgency=0.3, bucket=30.0)


def row(result: Review, order_id: str = "OAKMERE-1") -> dict[str, Any]:
    frame = result.orders.set_index("order_id")
    found: dict[str, Any] = frame.loc[order_id].to_dict()
    return found


def bars_of(prices: dict[str, tuple[float, float, float]], symbol: str = "OAKMERE") -> pd.DataFrame:
    """Half-hour bars by their beginning: open, close, volume."""
    rows = [
        {
            "symbol": symbol,
            "time": f"2026-03-05T{clock}",
            "open": first,
            "high": max(first, last),
            "low": min(first, last),
            "close": last,
            "volume": volume,
        }
        for clock, (first, last, volume) in prices.items()
    ]
    return pd.DataFrame(rows)


# chance


def test_outcomes_under_the_model_have_the_promised_law() -> None:
    """Kolmogorov and Smirnov's test (scipy) of each order's quantile in its own mixture."""
    orders = fair().orders
    assert (orders["held_against"] == AS_PLANNED).all()
    assert kstest(orders["quantile"], "uniform").pvalue > 1e-3
    z = orders["z"].to_numpy()
    assert abs(z.mean()) < 4.0 / np.sqrt(MANY)
    assert abs(z.std() - 1.0) < 4.0 * np.sqrt(1.5 / MANY)  # kurtosis of the mixture about 4


def test_costs_are_what_the_model_says_on_average() -> None:
    """By construction the residual holds all of chance: of both signs, and the rest expected."""
    frame = fair().orders
    expected = frame["spread"] + frame["displacement"] + frame["explicit"]
    assert frame["expected_cost"].to_numpy() == pytest.approx(expected.to_numpy())
    assert frame["timing"].isna().all()


def test_false_alarms_stay_at_the_stated_rate() -> None:
    """Lists of ten with nothing wrong at a rate of 20 %: 9 in 10 would be flagged uncontrolled."""
    chances = np.concatenate(
        [review(many(), dealt_by_the_model(many(), s)).orders["chance"] for s in (2, 3)]
    )
    lists = chances.reshape(-1, 10)
    alarms = np.array([(holm(chance) <= 0.2).any() for chance in lists])
    assert alarms.mean() <= 0.2 + 4.0 * np.sqrt(0.16 / len(lists))
    assert (lists.min(axis=1) <= 0.2).mean() > 0.7  # the test would see a lack of control
    assert fair().summary["total"]["flagged"] <= 1


def test_what_chance_does_not_explain_is_flagged_and_nothing_else() -> None:
    """One order seven standard deviations dearer, one cheaper, among many."""
    fills = dealt_by_the_model(many(), 1)
    std = fair().orders.set_index("order_id")["cost_std"]
    for order, way in (("S10-1", 7.0), ("S21-1", -7.0)):
        mine = fills["order_id"] == order
        side = -1.0 if order == "S10-1" else 1.0
        fills.loc[mine, "price"] += side * way * std[order] / fills.loc[mine, "quantity"].sum()
    orders = review(many(), fills).orders.set_index("order_id")
    before = set(fair().orders.loc[fair().orders["flagged"], "order_id"])
    assert set(orders.index[orders["flagged"]]) - before == {"S10-1", "S21-1"}
    assert orders.loc["S10-1", "verdict"] == "dearer than chance explains"
    assert orders.loc["S21-1", "verdict"] == "cheaper than chance explains"


def test_fills_off_the_plan_explain_what_chance_does_not() -> None:
    """All of it in the first half hour, at the very price that the model expects of that."""
    plan = planned(task(150_000), name(daily_vol=0.002, impact_coefficient=20.0), bucket=30.0)
    shares = np.zeros(len(plan.figures.shares))
    shares[np.flatnonzero(plan.book.kind == 0)[0]] = 150_000
    rushed = replace(plan.figures, shares=shares)
    found = row(review(plan, dealt_by_the_model(plan, 1, rushed)))
    assert found["flagged"]
    assert "which is not the plan, does" in found["verdict"]
    assert found["expected_as_traded"] > found["expected_cost"] + 2.0 * found["cost_std"]


def test_an_unfinished_order_is_held_against_the_law_of_what_it_traded() -> None:
    """That of an order of as many shares, with the same fills."""
    plan = one_order()
    half = on_plan(plan, "2026-03-05T12:00:00-05:00")
    found = review(plan, half, closes=closes(51.0))
    traded = float(half["quantity"].sum())
    smaller = planned(task(traded), name(spread_bps=4.0), urgency=0.3, bucket=30.0)
    ours = replace(smaller.figures, shares=found.traded.shares)
    mine = row(found)
    assert mine["held_against"] == AS_TRADED
    assert mine["expected_cost"] == pytest.approx(float(ours.expected_cost[0]))
    assert mine["cost_std"] == pytest.approx(float(ours.cost_std[0]))
    assert mine["opportunity"] == pytest.approx((40_000 - traded) * 1.0)


def test_a_list_has_a_place_in_its_own_law() -> None:
    plan = listed(corridors=TIES, **RISK)
    total = review(plan, on_plan(plan, "2026-03-07T00:00Z")).summary["total"]
    assert total["expected_cost"] == pytest.approx(plan.summary["total"]["expected_cost"])
    assert total["cost_std"] == pytest.approx(plan.summary["total"]["cost_std"])
    assert total["z"] == pytest.approx(
        (total["cost"] - total["expected_cost"]) / total["cost_std"], rel=1e-6
    )


# prices and parts


def closes(price: float, **more: Any) -> pd.DataFrame:
    return pd.DataFrame([{"symbol": "OAKMERE", "close": price} | more])


def test_timing_benchmarks_and_the_close_from_bars() -> None:
    """By hand: 100 at 11:00 and 300 at 11:45 of a market that rises 49, 50, 52, 52, 53."""
    plan = one_order(start="10:30", end="12:00", arrival_price=48.0)
    prices = {
        "10:00": (49.0, 50.0, 10_000.0),
        "10:30": (50.0, 52.0, 30_000.0),
        "11:00": (52.0, 52.0, 20_000.0),
        "11:30": (52.0, 53.0, 10_000.0),
        "15:30": (55.0, 56.0, 10_000.0),
    }
    rows = [("11:00", 100, 52.1), ("11:45", 300, 52.6)]
    fills = pd.DataFrame(rows, columns=["time", "quantity", "price"]).assign(
        order_id="OAKMERE-1", fee=[1.0, 2.5]
    )
    result = review(plan, fills, bars=bars_of(prices))
    found = row(result)
    assert found["arrival_price"] == pytest.approx(50.0)  # at 10:30, not the table's
    assert found["close_price"] == 56.0
    assert found["vwap_price"] == pytest.approx((30 * 51 + 20 * 52 + 5 * 52.25) / 55)
    assert found["twap_price"] == pytest.approx((30 * 51 + 30 * 52 + 15 * 52.25) / 75)
    assert found["share_of_volume"] == pytest.approx(400 / 55_000)
    assert found["average_price"] == pytest.approx(52.475)
    assert found["delay"] == pytest.approx(400 * 2.0)
    assert found["explicit"] == pytest.approx(3.5)
    assert found["opportunity"] == pytest.approx(39_600 * 8.0)
    moved = 100 * 2.0 + 300 * 2.5
    assert found["timing"] == pytest.approx(moved - found["displacement"])
    assert found["residual"] == pytest.approx(100 * 0.1 + 300 * 0.1 - found["spread"])
    assert found["against_vwap_bps"] == pytest.approx(1e4 * (52.475 / found["vwap_price"] - 1.0))
    assert result.fills["market_price"].tolist() == pytest.approx([52.0, 52.5])


def test_the_close_is_that_of_an_order_s_last_session() -> None:
    """Of two sessions with a bar each at their end, and one of the day after."""
    plan = one_order(end="2026-03-06T15:00")
    bars = pd.concat([bars_of({"15:30": (49.0, 50.0, 1e4)})] * 3, ignore_index=True)
    bars["time"] = [f"2026-03-{day:02d}T15:30" for day in (5, 6, 9)]
    bars["close"] = [49.5, 49.6, 49.7]
    fills = on_plan(plan, "2026-03-05T15:00:00-05:00")
    assert row(review(plan, fills, bars=bars))["close_price"] == 49.6
    both = review(plan, fills, bars=bars, closes=closes(50.4))
    assert row(both)["close_price"] == 50.4


@pytest.mark.parametrize("seed", range(5))
def test_parts_add_up_and_fills_add_up_to_orders(seed: int) -> None:
    """Random fills of random desks: paper less real, order by order; parts of the fills as well."""
    rng = np.random.default_rng(seed)
    plan = one_order(arrival_price=float(rng.uniform(45.0, 55.0)), side=["buy", "sell"][seed % 2])
    fills = on_plan(plan, "2026-03-05T16:00:00-05:00").sample(frac=0.6, random_state=seed)
    fills = fills.assign(price=rng.uniform(45.0, 55.0, len(fills)), fee=rng.uniform(0, 3.0))
    end = float(rng.uniform(45.0, 55.0))
    result = review(plan, fills, closes=closes(end))
    found, side = row(result), 1.0 if seed % 2 == 0 else -1.0
    q, p = fills["quantity"].to_numpy(), fills["price"].to_numpy()
    decision = found["decision_price"]
    paper = side * 40_000 * (end - decision)
    real = side * float(q @ (end - p)) - float(fills["fee"].sum())
    assert found["shortfall"] == pytest.approx(paper - real)
    parts = [0.0 if np.isnan(found[part]) else found[part] for part in PARTS]
    assert sum(parts) == pytest.approx(paper - real)
    sums = result.fills[[f"{part}_cost" for part in (*EXECUTION, "explicit")]].sum()
    for part in ("spread", "displacement", "residual", "explicit"):
        assert sums[f"{part}_cost"] == pytest.approx(found[part], abs=1e-6)
    total = result.summary["total"]
    assert total["shortfall"] == pytest.approx(paper - real)


def test_sells_mirror_buys() -> None:
    """Prices mirrored at the arrival price: every part in money is the same."""
    buy, sell = (one_order(side=side) for side in ("buy", "sell"))
    fills = on_plan(buy, "2026-03-05T15:00:00-05:00")
    fills["price"] = 50.0 + np.linspace(-0.2, 0.3, len(fills))
    mirrored = fills.assign(price=100.0 - fills["price"])
    one, other = (
        row(review(buy, fills, closes=closes(50.4))),
        row(review(sell, mirrored, closes=closes(49.6))),
    )
    for key in (*PARTS, "shortfall", "cost", "z", "quantile"):
        assert one[key] == pytest.approx(other[key], nan_ok=True), key


def test_the_market_adjusted_shortfall() -> None:
    plan = one_order()
    fills = on_plan(plan, "2026-03-07T00:00Z")
    found = row(review(plan, fills, closes=closes(50.0, market_move=0.005, beta=1.3)))
    assert found["adjusted_shortfall"] == pytest.approx(found["shortfall"] - 0.0065 * 2e6)


def test_orders_of_one_symbol_share_the_displacement() -> None:
    """Together they are displaced as one order of both is."""
    split = [task(30_000, order_id="A"), task(9_000, order_id="B")]
    both = planned(split, name(), urgency=0.3, bucket=30.0)
    whole = planned(task(39_000), name(), urgency=0.3, bucket=30.0)
    parts = review(both, on_plan(both, "2026-03-07T00:00Z")).orders["displacement"]
    one = review(whole, on_plan(whole, "2026-03-07T00:00Z")).orders["displacement"]
    assert float(parts.sum()) == pytest.approx(float(one.sum()), rel=2e-3)  # whole lots apart
    assert (parts > 0.0).all()


def test_money_is_in_base_currency_and_prices_in_the_orders_own() -> None:
    there = name(currency="GBP", fx=1.25, calendar="XLON", spread_bps=4.0, buy_fee_bps=1.0)
    settings = Settings().with_values("cost", base_currency="USD")
    given = pd.DataFrame([task(40_000)]), pd.DataFrame([there])
    plan = make(*given, settings=settings, date=DAY, at="08:00")
    fills = on_plan(plan, "2026-03-07T00:00Z", prices={"OAKMERE": 50.2})
    found = row(review(plan, fills))
    assert found["average_price"] == pytest.approx(50.2)
    assert found["execution"] == pytest.approx(1.25 * 0.2 * 40_000)
    assert found["explicit"] == pytest.approx(1.25 * 50.0 * 40_000 * 1e-4)
    own = review(plan, fills.assign(fee=0.1))
    assert row(own)["explicit"] == pytest.approx(1.25 * 0.1 * len(fills))


def test_in_thin_volume_the_same_fills_are_to_cost_more() -> None:
    """Bars of half the forecast volume beside our own: the state fades half as fast."""
    plan = one_order(start="10:00", end="15:30")
    fills = on_plan(plan, "2026-03-07T00:00Z")
    slices = plan.schedule.set_index(plan.schedule["start"].str[11:16])
    volume = (0.5 * slices["expected_volume"] + slices["shares"]).to_dict()
    bars = bars_of({clock: (50.0, 50.0, shares) for clock, shares in volume.items()})
    thin = review(plan, fills, bars=bars)
    found = row(thin)
    arrays = plan.book.arrays
    stages = replace(arrays.stages, theta=0.5 * arrays.stages.theta)
    ours = Figures(replace(arrays, stages=stages), plan.book.charges, plan.figures.shares)
    assert found["displacement"] == pytest.approx(float(ours.impact[0]))
    assert found["displacement"] > row(review(plan, fills))["displacement"]
    assert thin.fills["volume"].sum() < review(plan, fills).fills["volume"].sum()


# where fills belong


def test_fills_belong_to_the_bucket_of_their_time() -> None:
    """At the instant of an auction to that, soon after the close to the closing one."""
    plan = one_order()
    buckets = plan.schedule.set_index("bucket")
    times = ["09:30", "09:30:01", "10:00", "15:59", "16:04", "18:00"]
    fills = pd.DataFrame({"order_id": "OAKMERE-1", "time": times, "quantity": 10, "price": 50.0})
    result = review(plan, fills, closes=closes(50.0))
    found = buckets.loc[result.fills["bucket"], ["kind", "start"]]
    assert found["kind"].tolist() == ["auction", *["continuous"] * 3, "auction", "auction"]
    clocks = [text[11:16] for text in found["start"]]
    assert clocks == ["09:30", "09:30", "10:00", "15:30", "16:00", "16:00"]
    assert result.fills["kind"].tolist() == found["kind"].tolist()
    assert any("fills after its end" in note for note in result.notes)


def test_calibrate_can_read_a_review_s_orders_and_fills() -> None:
    """Fills with their context, orders with arrival prices and starts: tables themselves."""
    plan = one_order(start="10:30")
    orders = review(plan, on_plan(plan, "2026-03-07T00:00Z")).orders
    read = orders_table.ensure(orders, ignore_columns="*").frame
    assert read["start"].tolist() == ["2026-03-05T10:30:00-05:00"]
    assert read["arrival_price"].tolist() == [50.0]
    assert row(review(one_order(), on_plan(one_order(), "2026-03-07T00:00Z")))["start"] is None
    frame = fair().fills
    again = fills_table.ensure(frame, ignore_columns="*").frame
    assert again["price"].to_numpy() == pytest.approx(frame["price"].to_numpy())
    fill = {"order_id": "OAKMERE-1", "time": "10:00", "quantity": 100, "price": 50.0}
    alone = review(one_order(), pd.DataFrame([fill]), closes=closes(50.0)).fills
    assert alone["time"].tolist() == ["2026-03-05T10:00:00-05:00"]
    at = (frame["quantity"] / (frame["quantity"] + frame["volume"])).to_numpy()
    assert frame["participation"].to_numpy() == pytest.approx(at)


def test_groups_add_up_to_the_list() -> None:
    groups, total = fair().groups, fair().summary["total"]
    for by in ("side", "size", "participation"):
        mine = groups[groups["by"] == by]
        assert mine["orders"].sum() == MANY
        money = (mine["shortfall_bps"] * mine["notional"]).sum() / 1e4
        assert money == pytest.approx(total["shortfall"])
    hours = groups[groups["by"] == "time of day"]
    paid = (hours["cost_bps"] * hours["notional"]).sum() / 1e4
    assert paid == pytest.approx(total["cost"])
    assert hours["group"].is_monotonic_increasing
    assert not (groups["by"] == "group").any()  # the market table names none


# refusals


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"order_id": "other"}, "is no order of the plan"),
        ({"time": "09:00"}, "is before its order's time in the plan begins"),
        ({"time": "2026-03-07T12:00"}, "while its market is closed"),
        ({"quantity": 50_000}, "fills of OAKMERE-1 are more than its 40,000 shares"),
        ({"quantity": 0.5}, "fraction of a share"),
        ({"price": -1}, "must be above 0"),
    ],
)
def test_fills_that_do_not_fit_are_refused(change: dict[str, Any], said: str) -> None:
    fill = {"order_id": "OAKMERE-1", "time": "10:00", "quantity": 100, "price": 50.0}
    with pytest.raises(InputError, match=said):
        review(one_order(), pd.DataFrame([fill | change]), closes=closes(50.0))


def test_what_was_not_traded_needs_a_price() -> None:
    fill = {"order_id": "OAKMERE-1", "time": "10:00", "quantity": 100, "price": 50.0}
    with pytest.raises(InputError, match=r"39,900 shares of OAKMERE-1 .* give a closes table"):
        review(one_order(), pd.DataFrame([fill]))


@pytest.mark.parametrize("rate", [0.0, 1.0, float("nan")])
def test_a_rate_of_false_alarms_is_a_chance(rate: float) -> None:
    with pytest.raises(MisuseError, match="false_alarms must be above 0"):
        review(one_order(), pd.DataFrame(), false_alarms=rate)


def test_an_order_without_fills_is_all_opportunity() -> None:
    both = [task(1_000, order_id="A"), task(2_000, symbol="BECKFOOT", order_id="B")]
    plan = planned(both, [name(), name("BECKFOOT")], bucket=30.0)
    fills = on_plan(plan, "2026-03-07T00:00Z")
    ends = pd.DataFrame({"symbol": ["BECKFOOT"], "close": [51.0]})
    found = row(review(plan, fills[fills["order_id"] == "A"], closes=ends), "B")
    assert found["shortfall"] == found["opportunity"] == pytest.approx(2_000.0)
    assert found["verdict"] == "nothing traded"
    assert np.isnan(found["z"])
    assert not found["flagged"]


def test_figures_of_what_was_traded_are_the_plan_s_where_it_was_followed() -> None:
    plan = one_order()
    found = review(plan, on_plan(plan, "2026-03-07T00:00Z")).traded
    assert isinstance(found, Figures)
    assert found.expected_cost == pytest.approx(plan.figures.expected_cost)
    assert found.cost_std == pytest.approx(plan.figures.cost_std)
