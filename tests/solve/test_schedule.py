"""The driver: local minima, lower bounds, batches, warm starts and what it reports."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.solve import convexity
from scheduler.solve.interior import solve
from scheduler.solve.schedule import Schedule, Status, schedule
from tests.builders import join, order
from tests.solve.recomputed import cost_and_risk, objective
from tests.solve.test_interior_properties import drawn
from tests.solve.varied import varied

seeds = st.integers(0, 2**32 - 1)

# Uncapped orders of 12 relaxation volumes on which the iteration, started here and there, ends in
# several local minima, the worst of them 8 to 99 % above the best.
MANY_MINIMA = (2, 7, 8, 9, 12, 15, 16, 18, 23, 28, 29, 32, 35, 39)


def _large(seed: int) -> Orders:
    """Uncapped, Q/L = 12, over a tenth of a session to a whole one."""
    rng = np.random.default_rng(seed)
    count, horizon = int(rng.integers(8, 26)), rng.choice([0.1, 0.3, 1.0])
    volume = rng.uniform(0.2, 1.0, count)
    return order(
        volume * horizon / volume.sum(),
        quantity=12 * 0.05 * 1e6,
        urgency=float(rng.choice([0.1, 0.3, 1.0, 3.0])),
        vol=float(rng.choice([0.01, 0.02, 0.04])),
        feedback=float(rng.choice([1.0, 3.0])),
    )


def _minima(problem: Problem, seed: int, count: int = 20) -> list[Array]:
    """Where the iteration ends from random starts: spread out, lumpy, all in one bucket."""
    rng = np.random.default_rng(seed)
    buckets = len(problem.cap)
    starts = [rng.dirichlet(np.full(buckets, rng.choice([0.1, 0.3, 1.0]))) for _ in range(count)]
    starts[: count // 2] = [np.eye(buckets)[rng.integers(buckets)] for _ in range(count // 2)]
    found = [solve(problem, start=start) for start in starts]
    return [solution.fractions for solution in found if solution.converged.all()]


def _value(orders: Orders, result: Schedule) -> float:
    problem = assemble(orders)
    return objective(problem, problem.fractions(result.shares))


@pytest.mark.parametrize("seed", MANY_MINIMA)
def test_the_best_of_many_minima_is_found(seed: int) -> None:
    """As good as the best of twenty starts, which end in minima of different worth."""
    orders = _large(seed)
    problem = assemble(orders)
    values = [objective(problem, y) for y in _minima(problem, seed)]
    assert max(values) > 1.01 * min(values)
    result = schedule(orders)
    assert result.converged.all()
    assert _value(orders, result) <= min(values) * (1.0 + 1e-7)
    assert result.status == [Status.BOUNDED]
    assert 0.0 < result.gap[0] < 0.5


@pytest.mark.parametrize("seed", range(20))
def test_never_worse_than_a_cold_start(seed: int) -> None:
    """Proven or not, the homotopy replaces the first solution only where it is better."""
    orders = _large(100 + seed)
    problem = assemble(orders)
    cold = solve(problem)
    result = schedule(orders)
    assert result.converged.all()
    if cold.converged.all():
        assert _value(orders, result) <= objective(problem, cold.fractions) * (1.0 + 1e-9)


@pytest.mark.parametrize("seed", [*MANY_MINIMA[:6], 0, 1, 3, 4])
def test_a_lower_bound_is_below_every_schedule(seed: int) -> None:
    """Of C + lambda R at the implied lambda: below all minima, and all random schedules."""
    orders = _large(seed)
    problem = assemble(orders)
    result = schedule(orders)
    fractions = problem.fractions(result.shares)
    aversion = result.risk_aversion * problem.scale
    fixed = replace(problem, urgency=np.zeros(1), risk_aversion=aversion)
    least = float(convexity.lower_bound(problem, aversion, fractions)[0])
    rng = np.random.default_rng(seed)
    tried = _minima(fixed, seed) + [rng.dirichlet(np.ones(len(problem.cap))) for _ in range(20)]
    best = min(objective(fixed, y) for y in [*tried, fractions])
    assert least <= best * (1.0 + 1e-9)
    assert least > 0.4 * best


@pytest.mark.parametrize("seed", MANY_MINIMA[:6])
def test_the_gap_is_the_distance_to_the_bound(seed: int) -> None:
    """Relative to impact plus lambda Var."""
    orders = _large(seed)
    problem, result = assemble(orders), schedule(orders)
    fractions = problem.fractions(result.shares)
    aversion = float(result.risk_aversion[0] * problem.scale[0])
    cost, risk = cost_and_risk(problem, fractions)
    least = convexity.lower_bound(problem, np.array([aversion]), fractions)[0]
    impact = cost - problem.constant_cost[0] - problem.charge @ fractions
    told = (cost + aversion * risk - least) / (impact + aversion * risk)
    assert result.gap[0] == pytest.approx(told, rel=1e-6)


@given(seeds)
@settings(max_examples=25, deadline=None)
def test_what_is_called_proven_has_one_minimum(seed: int) -> None:
    """Random starts of orders of every kind end no lower."""
    orders = varied(seed)
    result = schedule(orders)
    if result.status != [Status.PROVEN] or (orders.cap > 0.0).sum() < 2:
        return
    problem = assemble(orders)
    if problem.cap.sum() < 1.0 + 1e-4:
        return
    best = _value(orders, result)
    for y in _minima(problem, seed, count=6):
        assert objective(problem, y) >= best - 1e-7 * abs(best)


@given(st.lists(seeds, min_size=2, max_size=6, unique=True))
@settings(max_examples=8, deadline=None)
def test_a_batch_of_any_kind_is_as_each_alone(chosen: list[int]) -> None:
    """Same status, same slices where the optimum is proven, same value where it is not."""
    orders = [*(varied(seed) for seed in chosen), _large(chosen[0] % 40)]
    together = schedule(join(orders))
    pieces = np.split(together.shares, np.cumsum([len(o.cap) for o in orders])[:-1])
    for i, (one, piece) in enumerate(zip(orders, pieces, strict=True)):
        alone = schedule(one)
        assert together.status[i] == alone.status[0]
        assert together.converged[i] == alone.converged[0]
        quantity = one.quantity[0]
        assert piece.sum() == pytest.approx(quantity, rel=1e-9)
        if alone.status == [Status.PROVEN]:
            assert np.abs(piece - alone.shares).max() < 1e-3 * quantity
        problem = assemble(one)
        values = [objective(problem, problem.fractions(s)) for s in (piece, alone.shares)]
        assert values[0] == pytest.approx(values[1], rel=1e-5)


@given(seeds, st.floats(0.8, 1.2))
@settings(max_examples=20, deadline=None)
def test_a_warm_start_changes_nothing_but_the_way(seed: int, factor: float) -> None:
    """Started from the schedule of another urgency, or from nonsense."""
    orders = drawn(seed, urgency=0.4)
    cold = schedule(orders)
    near = schedule(replace(orders, urgency=orders.urgency * factor), start=cold.shares)
    assert near.converged.all()
    nonsense = np.zeros_like(cold.shares)
    nonsense[-1] = orders.quantity[0]
    for start in (near.shares, nonsense):
        warm = schedule(orders, start=start)
        assert np.abs(warm.shares - cold.shares).max() < 2e-4 * orders.quantity[0]


def test_without_certificates_no_bound_is_looked_for() -> None:
    """The same slices; the status is at most local."""
    orders = _large(MANY_MINIMA[0])
    quick, full = schedule(orders, certify=False), schedule(orders)
    assert (quick.shares == full.shares).all()
    assert quick.status == [Status.LOCAL]
    assert full.status == [Status.BOUNDED]


def test_progress_counts_up_to_all_orders() -> None:
    """Orders without a choice are done from the start."""
    calls: list[tuple[int, int]] = []

    def progress(done: int, total: int) -> None:
        calls.append((done, total))

    forced = order([0.1, 0.1], cap=[0.0, np.inf])
    orders = join([forced, drawn(1), _large(2), drawn(3, exponent=1.0, relaxation=0.001)])
    schedule(orders, progress=progress)
    done = [count for count, _ in calls]
    assert done == sorted(done)
    assert calls[-1] == (4, 4)
    assert {total for _, total in calls} == {4}


def test_seconds_and_iterations_are_told_by_order() -> None:
    orders = join([drawn(seed) for seed in range(5)])
    result = schedule(orders)
    assert (result.iterations > 0).all()
    assert (result.seconds > 0.0).all()


def test_another_solver_can_be_given() -> None:
    """It is called with the problem of each batch, and its answer is used and checked."""
    asked: list[int] = []

    def counting(problem: Problem, **options: Any) -> Any:
        asked.append(len(problem.quantity))
        return solve(problem, **options)

    orders = join([drawn(1), drawn(2)])
    result = schedule(orders, solver=counting)
    assert sum(asked) >= 2
    assert result.shares == pytest.approx(schedule(orders).shares)
