"""Several orders of one symbol and side: one impact state, one total, a schedule for each."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from scheduler import Plan
from scheduler.errors import InfeasibleError, InputError
from scheduler.model.impact import displacement
from scheduler.model.state import imbalance
from tests.desk import Row, name, planned, row_of, slices, task
from tests.listed import RISK, TIES, listed, rows


def two(first: float = 40_000, second: float = 20_000, **late: Any) -> list[Row]:
    """Two buys of one symbol; columns of the second one."""
    return [task(first, order_id="A"), task(second, order_id="B", **late)]


def total(result: Plan) -> pd.Series:
    """What trades in each bucket, both orders together."""
    return result.schedule.groupby("bucket")["shares"].sum()


def test_splitting_an_order_in_two_changes_nothing() -> None:
    """Not the total, not what it costs: within what rounding to shares may do."""
    whole = planned(task(60_000), name(), urgency=0.3)
    parts = planned(two(), name(), urgency=0.3)
    assert np.abs(total(parts).to_numpy() - slices(whole)["shares"].to_numpy()).max() <= 1.0
    for figure in ("expected_cost", "impact", "cost_std", "objective"):
        assert parts.summary["total"][figure] == pytest.approx(
            whole.summary["total"][figure], rel=1e-4
        )
    assert parts.summary["total"]["quantiles"] == pytest.approx(
        whole.summary["total"]["quantiles"], rel=1e-4
    )
    assert row_of(parts, "A")["risk_aversion"] == row_of(parts, "B")["risk_aversion"]
    assert row_of(parts, "A")["certificate"]["status"] == "proven"
    assert "A + B: orders of one symbol, OAKMERE, are solved as one total" in parts.notes


@pytest.mark.parametrize(
    "late", [{"start": "13:00"}, {"start": "13:00", "end": "14:10"}, {"end": "10:20"}]
)
def test_every_order_keeps_to_its_window(late: dict[str, str]) -> None:
    """And completes in it, while the total keeps the cap."""
    result = planned(two(**late), name(), urgency=0.3)
    for order, quantity in (("A", 40_000), ("B", 20_000)):
        mine = slices(result, order)
        assert mine["shares"].sum() == quantity
        assert mine["remaining"].iloc[-1] == 0
    mine = slices(result, "B")
    traded = mine.loc[mine["shares"] > 0]
    assert traded["start"].str[11:16].min() >= late.get("start", "09:30")
    assert traded["end"].str[11:16].max() <= late.get("end", "16:00")
    volume = slices(result, "A")["expected_volume"].to_numpy()
    both = total(result).to_numpy()
    limit = np.where(slices(result, "A")["kind"] == "auction", 0.10, 0.25)
    assert (both <= volume * limit / (1.0 - limit) + 1.0).all()


def test_all_orders_of_a_bucket_pay_its_one_average_price() -> None:
    """The same cost a share, from the displacement that their total makes; costs add up."""
    result = planned(two(start="11:00"), name(spread_bps=4), urgency=0.02)
    a, b = slices(result, "A"), slices(result, "B")
    both = (a["shares"] > 0) & (b["shares"] > 0)
    assert both.sum() > 5
    price = [frame["expected_cost"][both] / frame["shares"][both] for frame in (a, b)]
    assert price[0].to_numpy() == pytest.approx(price[1].to_numpy(), rel=1e-12)
    assert a["displacement_bps"].tolist() == b["displacement_bps"].tolist()
    pooled = result.book.pooled.arrays
    flow = result.figures.pooled.shares
    _, after = imbalance(pooled.stages.layout, pooled.stages.theta, flow, pooled.initial)
    moved = 1e4 * displacement(pooled.market.take(np.zeros(len(after), dtype=np.int64)), after)
    assert a["displacement_bps"].to_numpy() == pytest.approx(moved[result.book.pooled.kind != 2])
    both_cost = sum(row_of(result, order)["expected_cost"] for order in "AB")
    assert both_cost == pytest.approx(result.summary["total"]["expected_cost"], rel=1e-12)
    assert a["expected_cost"].sum() == pytest.approx(row_of(result, "A")["expected_cost"])


def test_sharing_costs_more_than_being_alone() -> None:
    """What one order does to the price, the other pays too."""
    shared = planned(two(), name(), urgency=0.3).summary["total"]["expected_cost"]
    alone = sum(
        planned(task(q), name(), urgency=0.3).summary["total"]["expected_cost"]
        for q in (40_000, 20_000)
    )
    assert shared > 1.1 * alone


def test_windows_that_caps_do_not_serve_are_refused_with_the_time_and_the_amount() -> None:
    """Each alone would fit; together they do not."""
    window = {"start": "10:00", "end": "10:30"}
    orders = [task(15_000, order_id=key, **window) for key in ("A", "B")]
    planned(orders[0], name())
    with pytest.raises(InfeasibleError) as caught:
        planned(orders, name())
    message = str(caught.value)
    assert "orders A + B: at most" in message
    assert "of the 30,000 shares that they need from 2026-03-05T10:00:00-05:00" in message
    assert "max_participation 0.25; raise the cap or widen a window" in message


def test_a_budget_is_of_the_total() -> None:
    """Both orders get the urgency at which the symbol's risk meets it."""
    result = planned(two(), name(), risk_budget=60.0)
    std, notional = result.summary["total"]["cost_std"], result.summary["total"]["notional"]
    assert 1e4 * std / notional == pytest.approx(60.0, rel=1e-4)
    assert row_of(result, "A")["urgency"] == row_of(result, "B")["urgency"]


def test_a_finish_time_holds_for_each_of_them() -> None:
    result = planned(two(), name(), finish=["0.9@11:00"])
    for order, quantity in (("A", 40_000), ("B", 20_000)):
        mine = slices(result, order)
        done = mine.loc[mine["end"].str[11:16] <= "11:00", "shares"].sum()
        assert done >= 0.9 * quantity


def test_the_page_says_why_an_order_has_no_frontier() -> None:
    result = planned(two(), name(), urgency=0.3)
    figure = result.figure("frontier", "B")
    assert "shares its imbalance with other orders" in figure.layout.annotations[0].text
    assert len(result.figure("slices", "B").data)


# in a list


def _split(first: int, **late: Any) -> list[Row]:
    """The list of six with its first order in two."""
    whole, *others = rows()
    quantity = whole["quantity"] - first
    return [
        whole | {"order_id": "a", "quantity": first},
        whole | {"order_id": "b", "quantity": quantity} | late,
        *others,
    ]


def test_splitting_an_order_of_a_list_changes_nothing() -> None:
    """Balances within what rounding to shares may do, and the list's cost and risk."""
    whole, parts = (listed(orders, corridors=TIES, **RISK) for orders in (rows(), _split(15_000)))
    for column in ("bought", "cash", "gross", "factor:market"):
        moved = (whole.balances[column] - parts.balances[column]).abs().max()
        assert moved < 400.0  # a lot or two of the dearest name
    for figure in ("expected_cost", "cost_std", "objective"):
        assert parts.summary["total"][figure] == pytest.approx(
            whole.summary["total"][figure], rel=1e-5
        )


@pytest.mark.parametrize(
    "late", [{"start": "13:00"}, {"start": "11:00", "end": "12:00"}, {"end": "10:30"}]
)
def test_windows_and_corridors_of_a_list_hold_together(late: dict[str, str]) -> None:
    result = listed(_split(15_000, **late), corridors=TIES, **RISK)
    mine = slices(result, "b")
    traded = mine.loc[mine["shares"] > 0]
    assert traded["shares"].sum() == 25_000
    assert traded["start"].str[11:16].min() >= late.get("start", "09:30")
    assert traded["end"].str[11:16].max() <= late.get("end", "16:00")
    certificate = result.summary["total"]["certificate"]
    assert certificate["status"] == "proven"
    assert certificate["gap"] <= 1e-7
    assert max(result.summary["total"]["corridor_excess"].values()) <= 150.0  # the dearest lot


def test_a_list_can_be_asked_to_finish() -> None:
    """Four fifths of every order by noon, in a list with corridors."""
    result = listed(corridors=TIES, finish=["0.8@12:00"], **RISK)
    noon = result.schedule[result.schedule["end"].str[11:16] == "12:00"]
    assert (noon["cumulative"] >= 0.8 * (noon["cumulative"] + noon["remaining"])).all()
    free = listed(corridors=TIES, **RISK)
    before = free.schedule[free.schedule["end"].str[11:16] == "12:00"]
    assert (before["cumulative"] < 0.8 * (before["cumulative"] + before["remaining"])).any()
    assert result.summary["total"]["certificate"]["status"] == "proven"


def test_finish_and_corridors_that_contradict_each_other_are_refused() -> None:
    """Nothing of the cash may be spent, though most of every order is to be done."""
    narrow = pd.DataFrame({"kind": ["gross"], "lower": ["60%"], "upper": [""], "to": ["12:00"]})
    with pytest.raises(InfeasibleError, match="corridor gross: no schedule keeps"):
        listed(corridors=narrow, finish=["0.8@12:00"], **RISK)


@pytest.mark.parametrize("late", [{}, {"start": "13:00", "end": "14:10"}])
def test_the_conic_solver_gives_the_same_total(late: dict[str, str]) -> None:
    """The general solver keeps the same windows; to a millionth of the objective."""
    one, other = (
        planned(two(**late), name(), urgency=0.3, bucket=60.0, solver=solver)
        for solver in ("interior", "conic")
    )
    assert other.summary["total"]["objective"] == pytest.approx(
        one.summary["total"]["objective"], rel=1e-5
    )
    assert (total(one) - total(other)).abs().max() <= 10.0


def test_constraints_on_orders_of_one_symbol_are_refused() -> None:
    """They are not orders of their own to the solver."""
    table = pd.DataFrame(
        {"name": ["half"], "order_id": ["A"], "bucket": [1], "coefficient": [1.0], "upper": [10]}
    )
    with pytest.raises(InputError, match="solved as one total with others"):
        planned(two(), name(), constraints=table, solver="conic")
