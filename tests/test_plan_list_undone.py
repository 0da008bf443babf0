"""Lists with orders that their caps do not let complete: what stays undone is left and at risk."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from scheduler import InfeasibleError, MisuseError
from scheduler.balances import list_law
from scheduler.figures import Figures
from scheduler.solve.joint_certificate import certify
from tests.desk import Row, name, planned, slices, task
from tests.listed import RISK, TIES, listed, rows
from tests.listed import market as names

UNDONE = {"must_complete": "false", "max_participation": 0.02, "max_auction_participation": 0.02}


def capped() -> list[Row]:
    """Six orders, of which FIR can trade some 20,000 of 50,000 shares."""
    return [row | (UNDONE if row["symbol"] == "FIR" else {}) for row in rows()]


@pytest.fixture(scope="module")
def undone() -> Any:
    return listed(capped(), **RISK)


def test_what_caps_allow_is_traded_and_the_rest_is_left(undone: Any) -> None:
    """The cap in every bucket; the residual in the balances to the end, in money."""
    mine = slices(undone, "FIR-1")
    most = mine["expected_volume"] * 0.02 / 0.98
    assert (np.abs(mine["shares"] - most) < 1.0 + 1e-6).all()
    row = undone.summary["orders"]["FIR-1"]
    assert row["residual"] == 50_000 - mine["shares"].sum()
    assert row["residual_cost"] > 0.0
    last = undone.balances.iloc[-1]
    assert last["gross"] == pytest.approx(row["residual"] * 21.4)
    assert last["net"] == pytest.approx(-row["residual"] * 21.4)
    others = undone.schedule[undone.schedule["order_id"] != "FIR-1"]
    assert (others.groupby("order_id")["remaining"].last() == 0).all()
    assert any("FIR-1: 29,592 shares stay undone" in note for note in undone.notes)


def test_the_solver_sees_the_risk_of_what_stays(undone: Any) -> None:
    """Its variance, and the one of the figures, agree: factors, own variance and feedback."""
    transition = undone.transition
    ideal = transition.problem.fractions(undone.figures.shares)
    found = certify(transition.problem, transition.coupling, ideal, urgency=0.5)
    law = list_law(
        transition, Figures(undone.book.arrays, undone.book.charges, undone.figures.shares)
    )
    assert np.sqrt(found.risk) * transition.unit == pytest.approx(float(law.std[0]), rel=1e-6)
    certificate = undone.summary["total"]["certificate"]
    assert certificate["status"] == "proven"
    assert certificate["gap"] <= 1e-7
    assert abs(certificate["rounding_loss"]) < 1e-4


def test_what_stays_is_hedged_by_the_others(undone: Any) -> None:
    """A short position that stays makes the list keep its longs back, and they differ."""
    alone = listed([row for row in rows() if row["symbol"] != "FIR"], **RISK)
    bought = [
        result.schedule[(result.schedule["side"] == "buy")].groupby("bucket")["remaining"].sum()
        for result in (undone, alone)
    ]
    assert (bought[0] >= bought[1] - 20).all()
    assert bought[0].iloc[3] > 1.02 * bought[1].iloc[3]


def test_a_list_of_one_is_the_order_alone() -> None:
    order = task(50_000, symbol="FIR", **UNDONE)
    one = listed(
        [order],
        [row for row in names() if row["symbol"] == "FIR"],
        corridors=TIES[:1].assign(lower="-200%", upper="200%"),
    )
    single = planned(
        order, name("FIR", price=21.4, spread_bps=4, currency="USD"), urgency=0.5, bucket=30.0
    )
    for figure in ("expected_cost", "cost_std", "residual", "residual_cost"):
        assert one.summary["orders"]["FIR-1"][figure] == pytest.approx(
            single.summary["orders"]["FIR-1"][figure], rel=1e-9
        )
    assert one.summary["total"]["cost_std"] == pytest.approx(single.summary["total"]["cost_std"])


def test_enough_cap_leaves_nothing_and_changes_nothing() -> None:
    free = [row | {"must_complete": "false"} for row in rows()]
    assert listed(free, corridors=TIES, **RISK).schedule.equals(
        listed(corridors=TIES, **RISK).schedule
    )


def test_corridors_that_the_residual_breaks_are_refused() -> None:
    with pytest.raises(InfeasibleError, match="corridor factor:market"):
        listed(capped(), corridors=TIES, **RISK)
    with pytest.raises(MisuseError, match="solver conic with shares that caps leave undone"):
        listed(capped(), aim={"solver": "conic"}, **RISK)
