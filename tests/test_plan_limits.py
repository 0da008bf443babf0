"""Limits of a plan: budgets, finish times, caps that leave a rest, smallest slices, lots."""

from __future__ import annotations

import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler import Finish, InfeasibleError, InputError, Plan
from scheduler.figures import Figures
from tests.desk import Row, name, planned, random_desk, row_of, slices, task, unrounded

seeds = st.integers(0, 2**32 - 1)
some = settings(max_examples=6, deadline=None)


def _bps(figures: Figures) -> tuple[float, float]:
    """Expected cost and standard deviation of the only order."""
    cost, std = figures.expected_cost / figures.notional, figures.cost_std / figures.notional
    return 1e4 * float(cost[0]), 1e4 * float(std[0])


def _refused(*rows: Row | list[Row], **options: object) -> str:
    """The message that a plan is refused with as infeasible."""
    with pytest.raises(InfeasibleError) as caught:
        planned(*rows, **options)
    return str(caught.value)


# budgets


@pytest.mark.parametrize("budget", [60.0, 80.0, 110.0])
@pytest.mark.parametrize("cap", [0.25, 1.0])
def test_risk_budget_is_kept_and_used(budget: float, cap: float) -> None:
    """Standard deviation at most the budget, short of it by no more than 1e-4 of it."""
    result = planned(task(50_000, max_participation=cap), name(), risk_budget=budget)
    _, std = _bps(unrounded(result)[1])
    assert budget * (1.0 - 1e-4) < std <= budget
    assert row_of(result)["cost_std_bps"] == pytest.approx(budget, rel=1e-3)


@pytest.mark.parametrize("budget", [20.0, 24.0])
def test_cost_budget_is_kept_and_used(budget: float) -> None:
    """Expected cost at most the budget, short of it by no more than 1e-4 of it."""
    result = planned(task(50_000), name(spread_bps=4), cost_budget=budget)
    cost, _ = _bps(unrounded(result)[1])
    assert budget * (1.0 - 1e-4) < cost <= budget
    assert row_of(result)["expected_cost_bps"] == pytest.approx(budget, rel=1e-3)


@pytest.mark.parametrize("aim", [{"risk_budget": 80.0}, {"cost_budget": 22.0}])
def test_a_budget_is_the_urgency_that_it_finds(aim: dict[str, float]) -> None:
    """Asked for by that urgency, the plan has the same slices but for a few shares."""
    result = planned(task(50_000), name(), **aim)
    found = row_of(result)["urgency"]
    again = planned(task(50_000), name(), urgency=found)
    assert (slices(again)["shares"] - slices(result)["shares"]).abs().max() <= 5
    keys = ("expected_cost", "cost_std", "risk_aversion")
    for key in keys:
        assert row_of(again)[key] == pytest.approx(row_of(result)[key], rel=1e-5)


def test_each_order_of_a_list_keeps_the_budget() -> None:
    """One urgency for each; where patience is within the budget already, none."""
    orders = [task(n, symbol=s) for s, n in (("A", 50_000), ("B", 20_000), ("C", 500))]
    market = [name("A"), name("B"), name("C", daily_vol=0.005)]
    result = planned(orders, market, risk_budget=60.0)
    urgency = [figures["urgency"] for figures in result.summary["orders"].values()]
    std = [figures["cost_std_bps"] for figures in result.summary["orders"].values()]
    assert std[:2] == pytest.approx([60.0, 60.0], rel=1e-3)
    assert urgency[0] > urgency[1] > 0.0
    assert urgency[2] == 0.0
    assert std[2] < 60.0


@pytest.mark.parametrize("aim", ["risk_budget", "cost_budget"])
def test_a_budget_out_of_reach_is_refused_with_what_can_be_had(aim: str) -> None:
    """The value of the message, and a little more, can be had; a little less cannot."""
    text = _refused(task(50_000), name(), **{aim: 5.0})
    found = re.search(rf"OAKMERE-1: {aim} 5 bps is out of reach; .* is ([0-9.]+) bps", text)
    assert found
    least = float(found[1])
    assert row_of(planned(task(50_000), name(), **{aim: least + 0.1}))["urgency"] is not None
    assert "out of reach" in _refused(task(50_000), name(), **{aim: least - 0.1})


# finish


@given(seeds, st.sampled_from(["10:00", "11:07", "14:30"]), st.floats(0.05, 0.9))
@some
def test_finish_is_kept_to_a_lot(seed: int, time: str, part: float) -> None:
    """By then at least the fraction is done, whatever the urgency; buckets are cut there."""
    orders, market = random_desk(seed, end="15:30")
    asked = Finish(part, f"{time}:00")
    try:
        result = planned(orders, market, urgency=0.0, finish=[asked])
    except InfeasibleError as error:
        assert "finish asks for more" in str(error)  # noqa: PT017
        return
    for row, names in zip(orders, market, strict=True):
        rows = slices(result, row["order_id"])
        before = rows[rows["end"] <= f"2026-03-05T{time}:00-05:00"]
        assert before["end"].iat[-1] == f"2026-03-05T{time}:00-05:00"
        done = before["shares"].sum()
        assert done > part * row["quantity"] - names["lot_size"]
        assert rows["shares"].sum() == row["quantity"]


def test_finish_that_binds_costs_and_one_that_does_not_changes_nothing() -> None:
    """A patient plan that already has it done is the same plan."""
    free = planned(task(50_000), name(), urgency=0.0)
    done = slices(free).set_index("end")["cumulative"]["2026-03-05T12:00:00-05:00"] / 50_000
    loose = planned(task(50_000), name(), urgency=0.0, finish=[Finish(done - 0.05, "12:00:00")])
    tight = planned(task(50_000), name(), urgency=0.0, finish=[Finish(done + 0.05, "12:00:00")])
    assert (slices(loose)["shares"] - slices(free)["shares"]).abs().max() <= 2
    cost = row_of(free)["expected_cost"]
    assert row_of(tight)["expected_cost"] > cost * (1.0 + 1e-5)
    assert row_of(tight)["certificate"]["status"] == "proven"


def test_finish_of_the_settings_is_that_of_the_call() -> None:
    """Several, separated by commas."""
    asked = [Finish(0.3, "10:30:00"), Finish(0.9, "14:00:00")]
    one = planned(task(50_000), name(), finish=asked)
    other = planned(task(50_000), name(), finish="0.3@10:30, 0.9@14:00")
    assert slices(one).equals(slices(other))
    at = slices(one).set_index("end")["cumulative"]
    assert at["2026-03-05T10:30:00-05:00"] >= 15_000
    assert at["2026-03-05T14:00:00-05:00"] >= 45_000


def test_an_impossible_finish_is_refused_with_the_share_that_is_possible() -> None:
    """The share of the message, rounded down, is possible."""
    order, market = task(100_000, max_participation=0.1), name()
    text = _refused(order, market, finish=[Finish(0.9, "12:00:00")])
    found = re.search(r"\(([0-9.]+)%\) possible under max_participation 0.1", text)
    assert found
    assert "by 2026-03-05T12:00:00-05:00" in text
    possible = float(found[1]) / 100.0
    planned(order, market, finish=[Finish(possible - 0.001, "12:00:00")])
    assert _refused(order, market, finish=[Finish(possible + 0.001, "12:00:00")])


def test_a_finish_after_the_end_asks_nothing_and_says_so() -> None:
    rows = [task(symbol="A", end="12:00"), task(symbol="B")]
    result = planned(rows, [name("A"), name("B")], finish=[Finish(0.5, "14:00:00")])
    assert [note for note in result.notes if "finish" in note] == [
        "A-1: finish 50% by 14:00:00 is after its end, 2026-03-05T12:00:00-05:00"
    ]


def test_a_finish_before_an_order_begins_is_refused() -> None:
    """Rather than passed over: nothing of it can be done by then."""
    rows = [task(symbol="A"), task(symbol="B", start="11:00")]
    text = _refused(rows, [name("A"), name("B")], finish=[Finish(0.5, "10:00:00")])
    assert text.startswith("order B-1: finish asks for 50% by 10:00:00, but its time begins at")
    assert "2026-03-05T11:00:00-05:00" in text


# caps


def test_caps_that_leave_a_rest_are_refused_with_what_they_allow() -> None:
    """Every such order is named; at that quantity the order can be planned."""
    rows = [task(400_000, symbol="A", end="15:00"), task(9, symbol="B"), task(500_000, symbol="C")]
    text = _refused(rows, [name("A"), name("B"), name("C")])
    assert [line.split(":")[0] for line in text.splitlines()] == ["order A-1", "order C-1"]
    found = re.search(r"at most ([0-9,]+) of 400,000 shares", text)
    assert found
    assert "must_complete" in text
    most = int(found[1].replace(",", "")) - 1
    full = planned(task(most, symbol="A", end="15:00"), name("A"))
    assert slices(full, "A-1")["participation"].to_numpy() == pytest.approx(
        np.where(slices(full, "A-1")["kind"] == "auction", 0.1, 0.25), rel=1e-3
    )


def _unfinished(side: str = "buy", **columns: object) -> Plan:
    order = task(50_000, side=side, start="11:00", end="12:00", must_complete=False)
    market = {"profile": "flat", "spread_bps": 4, "buy_fee_bps": 1, "sell_fee_bps": 1}
    return planned(order | columns, name(**market), max_participation=0.1)


def test_an_order_that_need_not_complete_leaves_the_least() -> None:
    """All the cap allows is traded: 1/6.5 of a session at one part in nine of the others'."""
    result = _unfinished()
    most = 1e6 / 6.5 / 9.0
    rows = slices(result)
    assert rows["shares"].sum() == np.floor(most)
    assert row_of(result)["residual"] == 50_000 - np.floor(most)
    assert rows["remaining"].iat[-1] == row_of(result)["residual"]
    assert rows["shares"].to_numpy() == pytest.approx(most / 4.0, abs=1.0)
    assert any("stay undone under max_participation 0.1" in note for note in result.notes)


def test_the_residual_is_priced_apart_as_a_block_at_the_end() -> None:
    """c [(|Z|+R)^1.5 - |Z|^1.5]/1.5 with spread and fees; expected_cost is that of the slices."""
    result = _unfinished()
    figures, rows = row_of(result), slices(result)
    left, z = figures["residual"], 5e4 * rows["imbalance"].iat[-1]
    c = 50.0 * np.sqrt(2.0) * 0.02 / np.sqrt(1.5) / np.sqrt(1e6)
    block = c * ((z + left) ** 1.5 - z**1.5) / 1.5
    charge = 50.0 * left * (2e-4 + 1e-4)
    assert figures["residual_cost"] == pytest.approx(block + charge)
    assert figures["expected_cost"] == pytest.approx(rows["expected_cost"].sum())
    assert result.summary["total"]["residual_cost"] == figures["residual_cost"]


def test_an_order_that_need_not_complete_but_can_is_as_any_other() -> None:
    result = planned(task(must_complete=False), name())
    assert slices(result).equals(slices(planned(task(), name())))
    assert row_of(result)["residual_cost"] == 0.0


def test_an_order_that_may_not_trade_at_all_stays_whole() -> None:
    """A cap of 0: no slice, no cost, the whole order left."""
    result = planned(
        task(must_complete=False, max_participation=0, end="15:00", start="10:00"), name()
    )
    assert slices(result)["shares"].sum() == 0
    figures = row_of(result)
    assert (figures["residual"], figures["expected_cost"]) == (20_000, 0.0)
    assert figures["residual_cost"] > 0.0


def test_caps_that_bind_are_noted() -> None:
    """With the number of buckets; none where nothing binds."""
    result = planned(task(100_000), name(), urgency=2.0)
    full = slices(result).query("kind == 'continuous' and participation > 0.2499")
    assert f"OAKMERE-1: max_participation binds in {len(full)} buckets" in result.notes
    assert len(full) > 3
    assert not planned(task(100), name(), urgency=0.0).notes


def test_auctions_have_a_cap_of_their_own() -> None:
    """Of the order, else of the settings; never that of continuous trading."""
    for columns, chosen, cap in (
        ({}, {}, 0.10),
        ({}, {"max_auction_participation": 0.3}, 0.3),
        ({"max_auction_participation": 0.02}, {"max_auction_participation": 0.3}, 0.02),
        ({"max_auction_participation": 0}, {}, 0.0),
    ):
        result = planned(task(100_000, **columns), name(), urgency=0.0, **chosen)
        auctions = slices(result).query("kind == 'auction'")
        assert len(auctions) == 2
        room = 1.0 / auctions["expected_volume"].min()
        assert auctions["participation"].max() <= cap + room
        assert auctions["participation"].max() >= min(cap, 0.15) - room


# slices


@given(seeds, st.sampled_from([0.01, 0.04, 0.15]), st.sampled_from([0.0, 0.5, 5.0]))
@some
def test_min_slice_is_kept(seed: int, part: float, urgency: float) -> None:
    """Every slice but the last is 0 or at least so large, and all still adds up."""
    orders, market = random_desk(seed, most=3)
    for row in orders:
        row["min_slice"] = float(np.ceil(part * row["quantity"]))
    result = planned(orders, market, urgency=urgency)
    for row in orders:
        shares = slices(result, row["order_id"])["shares"]
        assert shares.sum() == row["quantity"]
        traded = shares[shares > 0]
        assert (traded[:-1] >= row["min_slice"]).all()


def test_min_slice_drops_buckets_and_says_so() -> None:
    """Twenty eight buckets of a patient order become at most five."""
    result = planned(task(20_000, min_slice=4_000, end="15:45"), name(), urgency=0.0)
    shares = slices(result)["shares"]
    assert (shares > 0).sum() <= 5
    assert shares[shares > 0].min() >= 4_000
    assert any("bucket(s) dropped to keep min_slice" in note for note in result.notes)
    free = planned(task(20_000, end="15:45"), name(), urgency=0.0)
    assert row_of(result)["objective"] > row_of(free)["objective"]


def test_min_slice_and_finish_go_together() -> None:
    """Buckets that a finish time needs are not dropped, even where all are below min_slice."""
    order = task(30_000, min_slice=5_000, max_participation=0.1)
    result = planned(order, name(), urgency=0.0, finish=[Finish(0.5, "11:00:00")])
    at = slices(result).set_index("end")["cumulative"]
    assert at["2026-03-05T11:00:00-05:00"] >= 15_000
    assert slices(result)["shares"].sum() == 30_000
    order = task(127_000, min_slice=18_000)
    market = name(adv=745_000.0, calendar="24/7")
    result = planned(
        order, market, at="00:00", urgency=0.0, bucket=60, finish=[Finish(0.12, "11:00:00")]
    )
    at = slices(result).set_index("end")["cumulative"]
    assert at["2026-03-05T11:00:00+00:00"] >= 0.12 * 127_000 - 1
    assert any("stay below min_slice" in note for note in result.notes)


def test_an_odd_remainder_rides_on_the_last_slice_with_a_note() -> None:
    """All other slices are whole lots."""
    result = planned(task(20_037, lot_size=100), name())
    shares = slices(result)["shares"]
    odd = shares[shares % 100 > 0]
    assert odd.tolist() == [shares[shares > 0].iat[-1]]
    assert odd.iat[0] % 100 == 37
    assert "OAKMERE-1: 37 shares beyond whole lots ride on the last slice" in result.notes


def test_an_order_of_less_than_a_lot_is_one_slice() -> None:
    result = planned(task(37, lot_size=100), name())
    shares = slices(result)["shares"]
    assert shares[shares > 0].tolist() == [37]


def test_the_orders_lot_wins_over_the_markets() -> None:
    """An empty cell of the orders table is the market's."""
    orders = [task(9_000, symbol="A", lot_size=20), task(9_000, symbol="B", lot_size=None)]
    result = planned(orders, [name("A", lot_size=50), name("B", lot_size=50)])
    for order, lot in (("A-1", 20), ("B-1", 50)):
        shares = slices(result, order)["shares"]
        assert (shares % lot == 0).all()
        assert (shares % 1_000 != 0).any()


def test_rounding_loss_is_the_objectives() -> None:
    """Relative, of the whole lots against what they were rounded from."""
    result = planned(task(10_000, lot_size=1_000), name(), urgency=0.2)
    _, ideal = unrounded(result)
    loss = row_of(result)["objective"] / float(ideal.objective[0]) - 1.0
    assert loss > 1e-6
    assert row_of(result)["certificate"]["rounding_loss"] == pytest.approx(loss, rel=1e-6)


def test_frames_that_hold_impossible_rows_are_input_errors() -> None:
    """Not infeasible: no plan is tried."""
    with pytest.raises(InputError, match="min_slice: is more than the quantity"):
        planned(task(100, min_slice=200), name())
