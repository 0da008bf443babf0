"""The certificates against the problem's formulas written out anew."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.problem import Orders, assemble
from scheduler.solve.interior import solve
from scheduler.solve.optimality import duality_gap, implied_risk_aversion, objective_parts
from scheduler.solve.schedule import Status, schedule
from tests.builders import cost_of, join, order
from tests.solve.recomputed import (
    cost_and_risk,
    gradient,
    least_linear,
    objective,
    relative_gap,
    size,
)
from tests.solve.test_interior_properties import drawn, seeds

some = settings(max_examples=30, deadline=None)


def _with_a_ceiling(seed: int) -> Orders:
    """At most a little less left half way than a patient schedule would leave."""
    orders = drawn(seed, urgency=0.0, participation=0.4)
    middle = len(orders.cap) // 2
    patient = solve(assemble(orders)).fractions
    ceiling = np.full(len(orders.cap), np.inf)
    reachable = 1.0 - np.minimum(orders.cap[: middle + 1].sum() / orders.quantity[0], 1.0)
    left = 0.5 * (1.0 - patient[: middle + 1].sum()) + 0.5 * reachable
    ceiling[middle] = left * orders.quantity[0]
    return replace(orders, ceiling=ceiling)


@given(seeds, st.sampled_from([0.0, 0.4, -0.4, -2.0]))
@some
def test_gradient_is_that_of_the_formulas(seed: int, start: float) -> None:
    """The adjoint recursion against complex-step derivatives, at any schedule."""
    orders = drawn(seed)
    problem = assemble(replace(orders, initial=start * orders.quantity))
    y = np.random.default_rng(seed).dirichlet(np.ones(len(problem.cap)))
    parts = objective_parts(problem, y)
    cost, risk = cost_and_risk(problem, y)
    assert parts.point.cost[0] == pytest.approx(cost, rel=1e-10, abs=1e-12)
    assert parts.point.risk[0] == pytest.approx(risk, rel=1e-10)
    assert parts.size[0] == pytest.approx(size(problem, y), rel=1e-9)
    exact = gradient(problem, y)
    assert parts.gradient == pytest.approx(exact, rel=1e-7, abs=1e-7 * np.abs(exact).max())


@given(seeds)
@some
def test_gap_bounds_the_distance_to_the_optimum(seed: int) -> None:
    """At any feasible schedule of a convex problem, and equal to the sorted linear minimum."""
    problem = assemble(drawn(seed, urgency=0.0))
    best = solve(problem, tolerance=1e-12).fractions
    slack = np.minimum(problem.cap, 1.0) - best
    y = best + 0.3 * (slack / slack.sum() - best)  # inside: towards a mix of what is free
    y = np.clip(y, 0.0, problem.cap)
    y += (1.0 - y.sum()) * (problem.cap - y) / (problem.cap - y).sum()
    parts = objective_parts(problem, y)
    gap = float(duality_gap(problem, parts, y, np.zeros(len(y)))[0])
    assert gap >= objective(problem, y) - objective(problem, best) - 1e-10
    slope = gradient(problem, y)
    assert gap == pytest.approx(slope @ y - least_linear(slope, problem.cap), rel=1e-5, abs=1e-9)


@given(seeds)
@some
def test_gap_of_an_order_with_one_ceiling_is_closed(seed: int) -> None:
    """Buckets without a ceiling add nothing, whatever tiny price they carry."""
    problem = assemble(_with_a_ceiling(seed))
    solution = solve(problem)
    assert solution.converged.all()
    y, price = solution.fractions, solution.ceiling_price
    assert relative_gap(problem, y, price) < 1e-7
    parts = objective_parts(problem, y)
    assert duality_gap(problem, parts, y, price)[0] < 1e-7 * parts.size[0]


def test_implied_risk_aversion_is_half_of_urgency_over_deviation() -> None:
    """lambda = U/(2 sqrt R), and nothing where there is no variance."""
    problem = assemble(join([order([0.1, 0.1], urgency=u) for u in (0.0, 2.0, 2.0)]))
    implied = implied_risk_aversion(problem, np.array([4.0, 4.0, 0.0]))
    assert implied.tolist() == [0.0, 0.5, 0.0]


@given(seeds)
@some
def test_implied_risk_aversion_reproduces_the_schedule(seed: int) -> None:
    """The optimum at U is the optimum of C + lambda Var at its implied lambda."""
    orders = drawn(seed, urgency=0.8)
    by_urgency = schedule(orders)
    by_aversion = schedule(orders.asking(np.zeros(1), by_urgency.risk_aversion))
    difference = np.abs(by_aversion.shares - by_urgency.shares).max()
    assert difference < 2e-4 * orders.quantity[0]
    assert cost_of(orders, by_aversion.shares) == pytest.approx(
        cost_of(orders, by_urgency.shares), rel=1e-5
    )


@given(st.lists(seeds, min_size=2, max_size=8, unique=True))
@some
def test_driver_gives_each_order_what_it_has_alone(chosen: list[int]) -> None:
    """Orders are grouped by quadrature, sign and ceilings, so company changes nothing."""
    orders = [drawn(seed) for seed in chosen]
    orders[0] = _with_a_ceiling(chosen[0])
    orders[1] = replace(orders[1], initial=-0.4 * orders[1].quantity)
    orders.append(order([0.0, 0.08], share=[0.0, 0.0], quantity=1e3, participation=0.2))
    together = schedule(join(orders))
    assert together.converged.all()
    proven = np.array([status is Status.PROVEN for status in together.status])
    assert (together.gap[proven] < 1e-7).all()
    pieces = np.split(together.shares, np.cumsum([len(o.cap) for o in orders])[:-1])
    for one, piece in zip(orders, pieces, strict=True):
        assert np.abs(piece - schedule(one).shares).max() < 1e-5 * one.quantity[0]


@pytest.mark.parametrize("cap", [5e4, 6e4, np.inf])
def test_an_order_with_a_single_bucket_trades_there(cap: float) -> None:
    """Nothing to choose: the whole order, at cost and risk that still hold."""
    only = order([0.1, 0.3, 0.2], cap=[0.0, cap, 0.0], urgency=1.0)
    result = schedule(only)
    assert result.shares == pytest.approx([0.0, 5e4, 0.0])
    assert result.converged.all()
    assert result.gap[0] < 1e-7


def test_without_variance_urgency_has_no_effect() -> None:
    """An order over auctions only: the patient schedule, and no implied risk aversion."""
    auctions = [0.04, 0.02, 0.08]
    patient = schedule(order(auctions, share=[0.0, 0.0, 0.0], participation=0.4, quantity=3e4))
    urgent = schedule(
        order(auctions, share=[0.0, 0.0, 0.0], participation=0.4, quantity=3e4, urgency=5.0)
    )
    assert urgent.shares == pytest.approx(patient.shares, abs=1.0)
    assert urgent.risk_aversion[0] == 0.0
