"""Lists that are not convex: several starts, and a bound that no schedule undercuts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scheduler.solve import joint
from scheduler.solve.joint_certificate import certify
from scheduler.solve.joint_global import best_of_starts, lower_bound
from tests.listed import RISK, TIES, listed, rows
from tests.solve.lists import feasible_fractions, objective, random_list


def large(times: float = 25.0) -> list[dict]:
    """The six orders, much larger and without caps."""
    free = {"max_participation": 1.0, "max_auction_participation": 1.0}
    return [row | {"quantity": times * row["quantity"]} | free for row in rows()]


@pytest.mark.parametrize("seed", range(6))
def test_no_schedule_is_below_the_bound(seed: int) -> None:
    """Random feasible ones, and the best that several starts find; at one lambda."""
    listing = random_list(seed, names=4, buckets=6)
    problem = replace(listing.problem, feedback_weight=30.0 * listing.problem.feedback_weight)
    coupling = replace(
        listing.coupling,
        rows=listing.coupling.rows[:0],
        constant=listing.coupling.constant[:0],
        lower=listing.coupling.lower[:0],
        upper=listing.coupling.upper[:0],
    )
    price = 0.05
    found = joint.solve(problem, coupling, risk_aversion=price)
    best = best_of_starts(problem, coupling, found, urgency=0.0, risk_aversion=price)
    fractions = np.clip(best.fractions, 0.0, problem.cap)
    least = certify(problem, coupling, fractions, risk_aversion=price).objective
    bound = lower_bound(problem, coupling, price, fractions)
    assert np.isfinite(bound)
    assert bound <= least * (1.0 + 1e-9)
    listing = replace(listing, problem=problem, coupling=coupling)
    for other in range(20):
        tried = feasible_fractions(problem, other)
        value = objective(listing, tried, risk_aversion=price)
        assert value >= bound
        assert value >= least * (1.0 - 1e-9)


def test_of_a_convex_list_the_bound_is_its_optimum() -> None:
    """Without feedback both relaxations are the problem itself."""
    listing = random_list(3, names=4, buckets=6)
    problem = replace(
        listing.problem, feedback_weight=np.zeros_like(listing.problem.feedback_weight)
    )
    found = joint.solve(problem, listing.coupling, risk_aversion=0.02)
    proof = certify(problem, listing.coupling, found.fractions, risk_aversion=0.02)
    bound = lower_bound(problem, listing.coupling, 0.02, found.fractions)
    assert bound == pytest.approx(proof.objective, rel=1e-6)


def test_large_orders_without_caps_are_bounded_and_say_so() -> None:
    result = listed(large(), corridors=TIES, aim={"urgency": 1.0}, **RISK)
    certificate = result.summary["total"]["certificate"]
    assert certificate["status"] == "bounded"
    assert certificate["names_not_convex"] > 0
    assert 0.0 < certificate["gap"] < 0.5
    assert "by more than the gap shown" in certificate["meaning"]
    row = next(iter(result.summary["orders"].values()))
    assert row["certificate"]["gap"] == certificate["gap"]


def test_small_orders_are_proven_as_before() -> None:
    certificate = listed(corridors=TIES, **RISK).summary["total"]["certificate"]
    assert certificate["status"] == "proven"
    assert certificate["gap"] <= 1e-7
