"""What an optimal schedule must satisfy: recomputed optimality, the same task told otherwise."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from typing import Any
from unittest.mock import patch

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.model.ragged import Array
from scheduler.problem import Orders, assemble
from scheduler.solve.interior import solve
from scheduler.solve.schedule import schedule as driver
from tests.builders import cost_of, join, order, schedule, variance_of
from tests.solve.recomputed import cost_and_risk, objective, relative_gap, size

seeds = st.integers(0, 2**32 - 1)
some = settings(max_examples=25, deadline=None)


def drawn(seed: int, **fixed: Any) -> Orders:
    """A capped order on a random volume curve, with room left between its caps."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(2, 31))
    volume = rng.uniform(0.2, 1.0, count)
    volume *= rng.uniform(0.1, 1.0) / volume.sum()
    chosen: dict[str, Any] = {
        "participation": float(rng.choice([0.1, 0.25, 0.4])),
        "share": volume * rng.uniform(0.5, 1.5, count),
        "charge": float(rng.choice([0.0, 0.01])),
        "urgency": float(rng.choice([0.0, 0.3, 1.0, 3.0])),
        "relaxation": 10.0 ** rng.uniform(-2.5, 0.3),
        "exponent": float(rng.choice([0.4, 0.5, 0.6, 1.0])),
        "vol": rng.uniform(0.005, 0.05),
    } | fixed
    m = chosen["participation"]
    room = volume.sum() * 1e6 * (m / (1.0 - m) if m < 1.0 else 0.2)
    return order(volume, quantity=room * rng.uniform(0.02, 0.9), **chosen)


def same(one: Array, other: Array, quantity: float, within: float = 1e-4) -> bool:
    """Schedules equal to within a part of the order; solved to a gap of 1e-12."""
    return bool(np.abs(one - other).max() <= within * quantity)


def _exactly(orders: Orders) -> Array:
    return schedule(orders, tolerance=1e-12)


def _mean_time(shares: Array, orders: Orders) -> float:
    """Mean execution time in volume."""
    volume = orders.stages.theta
    middle = np.cumsum(volume) - volume / 2.0
    return float(middle @ shares / shares.sum())


# optimality


@given(seeds, st.sampled_from([0.0, 0.2, 1.0]), st.sampled_from([0.0, 0.3, -0.3, -2.0]))
@settings(max_examples=60, deadline=None)
def test_gap_recomputed_from_the_formulas_is_closed(seed: int, by: float, start: float) -> None:
    """Below 1e-7 of impact plus lambda Var, for any urgency, risk aversion and reading."""
    orders = drawn(seed)
    orders = replace(orders, initial=start * orders.quantity)
    problem = assemble(orders)
    _, risk = cost_and_risk(problem, np.full(len(problem.cap), 1.0 / len(problem.cap)))
    problem = replace(problem, risk_aversion=np.full(1, by / risk))
    solution = solve(problem)
    assert solution.converged.all()
    assert relative_gap(problem, solution.fractions) < 1e-7


@given(seeds)
@some
def test_no_feasible_schedule_nearby_is_better(seed: int) -> None:
    """Twenty random moves between two buckets each, kept within the caps."""
    problem = assemble(drawn(seed))
    y = solve(problem, tolerance=1e-12).fractions
    best = objective(problem, y)
    rng = np.random.default_rng(seed)
    for _ in range(20):
        a, b = rng.choice(len(y), 2, replace=False)
        amount = rng.uniform() * min(y[a], problem.cap[b] - y[b])
        moved = y.copy()
        moved[a] -= amount
        moved[b] += amount
        assert objective(problem, moved) >= best - 1e-9 * abs(best)


@given(seeds)
@some
def test_caps_and_the_total_are_kept(seed: int) -> None:
    """Every slice within its cap and not negative; fractions add up to 1 to rounding."""
    orders = drawn(seed)
    shares = schedule(orders)
    assert (shares >= 0.0).all()
    assert (shares <= orders.cap).all()
    assert shares.sum() == pytest.approx(orders.quantity[0], rel=1e-12)


@given(seeds, st.floats(0.2, 0.8), st.floats(0.2, 0.9))
@some
def test_ceilings_are_kept_and_priced(seed: int, when: float, left: float) -> None:
    """x_t <= ceiling_t at a given time, and the gap is closed with the ceiling's price."""
    orders = drawn(seed, urgency=0.0)
    count = len(orders.cap)
    at = min(int(when * count), count - 2)
    reachable = 1.0 - orders.cap[: at + 1].sum() / orders.quantity[0]
    bound = max(left, reachable + 0.05)
    ceiling = np.full(count, np.inf)
    ceiling[at] = bound * orders.quantity[0]
    problem = assemble(replace(orders, ceiling=ceiling))
    solution = solve(problem)
    assert solution.converged.all()
    assert 1.0 - np.cumsum(solution.fractions)[at] <= bound + 2e-9
    assert relative_gap(problem, solution.fractions, solution.ceiling_price) < 1e-7


def test_a_binding_ceiling_moves_the_schedule_forward_and_costs_something() -> None:
    volume = np.full(20, 0.02)
    free = order(volume, participation=0.4)
    ceiling = np.full(20, np.inf)
    ceiling[9] = 0.2 * free.quantity[0]
    bound = replace(free, ceiling=ceiling)
    patient, hurried = _exactly(free), _exactly(bound)
    assert patient[10:].sum() > ceiling[9]
    assert hurried[10:].sum() == pytest.approx(ceiling[9], rel=1e-6)
    assert cost_of(free, hurried) > cost_of(free, patient)


def test_caps_that_bind_are_used_in_full() -> None:
    """An urgent order trades at its cap from the start until it is nearly done."""
    orders = order(np.full(20, 0.02), participation=0.1, quantity=1.5e4, urgency=50.0)
    shares = _exactly(orders)
    assert shares[:6] == pytest.approx(orders.cap[:6], rel=1e-6)
    assert shares[7:].sum() < 1e-4 * orders.quantity[0]


# the same task told otherwise


@given(seeds, st.floats(0.01, 100.0), st.floats(0.0, 0.5))
@some
def test_share_split_leaves_the_schedule_unchanged(seed: int, ratio: float, start: float) -> None:
    """ratio shares for one at 1/ratio of the price: the same fractions in the same buckets."""
    orders = drawn(seed)
    orders = replace(orders, initial=start * orders.quantity)
    market = replace(
        orders.market, price=orders.market.price / ratio, adv=orders.market.adv * ratio
    )
    split = replace(
        orders,
        market=market,
        quantity=orders.quantity * ratio,
        initial=orders.initial * ratio,
        cap=orders.cap * ratio,
        charge=orders.charge / ratio,
    )
    assert same(_exactly(split) / ratio, _exactly(orders), orders.quantity[0], 1e-5)


@given(seeds, st.sampled_from([1e-6, 0.01, 130.0, 1e6]))
@some
def test_currency_leaves_the_schedule_unchanged(seed: int, rate: float) -> None:
    """Price and charges in another unit; risk aversion in 1/unit."""
    orders = drawn(seed, urgency=0.5)
    shares = _exactly(orders)
    aversion = 0.3 * cost_of(orders, shares) / variance_of(orders, shares)
    orders = replace(orders, risk_aversion=np.abs(aversion))
    other = replace(
        orders,
        market=replace(orders.market, price=orders.market.price * rate),
        charge=orders.charge * rate,
        risk_aversion=orders.risk_aversion / rate,
    )
    assert same(_exactly(other), _exactly(orders), orders.quantity[0], 1e-5)


@given(seeds)
@some
def test_a_bucket_that_cannot_trade_may_be_cut_at_will(seed: int) -> None:
    """A no-trade spell in one piece or in three is the same problem."""
    rng = np.random.default_rng(seed)
    volume = rng.uniform(0.02, 0.05, 12)
    cap = volume * 3e5
    cap[[0, 5]] = 0.0
    share = volume * 0.8
    pieces = np.where(cap == 0.0, 3, 1)
    one = order(volume, cap=cap, share=share, quantity=3e4, urgency=0.5, initial=-4e3)
    cut = order(
        np.repeat(volume / pieces, pieces),
        cap=np.repeat(cap, pieces),
        share=np.repeat(share / pieces, pieces),
        quantity=3e4,
        urgency=0.5,
        initial=-4e3,
    )
    merged = np.add.reduceat(_exactly(cut), np.cumsum(pieces) - pieces)
    assert same(merged, _exactly(one), 3e4, 1e-6)


@pytest.mark.parametrize("urgency", [0.0, 0.2])
def test_refinement_converges(urgency: float) -> None:
    """Halving buckets never costs more (the coarse schedule stays possible) and settles down.

    So does the cumulative curve at the coarsest bucket edges.
    """
    values, curves = [], []
    for count in (13, 26, 52, 104, 208):
        orders = order(np.full(count, 1.0 / count), urgency=urgency)
        shares = _exactly(orders)
        value = cost_of(orders, shares) + urgency * np.sqrt(variance_of(orders, shares))
        values.append(float(value[0]))
        curves.append(np.cumsum(shares)[count // 13 - 1 :: count // 13] / orders.quantity)
    falls = -np.diff(values)
    assert (falls > 0.0).all()
    assert (falls[1:] < 0.75 * falls[:-1]).all()
    moves = [np.abs(b - a).max() for a, b in pairwise(curves)]
    assert moves[-1] < 0.3 * moves[0]
    assert moves[-1] < 0.01


# how the optimum moves with the task


@given(seeds, st.floats(0.0, 3.0), st.floats(0.05, 3.0))
@some
def test_more_urgency_never_raises_risk_nor_lowers_cost(seed: int, low: float, more: float) -> None:
    orders = drawn(seed)
    results = []
    for urgency in (low, low + more):
        problem = assemble(replace(orders, urgency=np.full(1, urgency)))
        solution = solve(problem, tolerance=1e-11)
        assert solution.converged.all()
        results.append(cost_and_risk(problem, solution.fractions))
    (cost, risk), (dearer, calmer) = results
    assert np.sqrt(calmer) <= np.sqrt(risk) * (1.0 + 1e-7)
    assert dearer >= cost - 1e-8 * (abs(cost) + 1.0)


@given(seeds, st.floats(0.05, 1.0))
@some
def test_without_feedback_a_reading_on_our_side_makes_us_later(seed: int, part: float) -> None:
    """More buyers when we buy: what is in the price will fade. Against us: we sell into it now."""
    orders = drawn(seed, feedback=0.0, participation=0.4, exponent=0.5)
    times = []
    for sign in (1.0, 0.0, -1.0):
        read = replace(orders, initial=sign * part * orders.quantity)
        times.append(_mean_time(_exactly(read), orders))
    slack = 1e-6 * orders.stages.theta.sum()
    assert times[0] >= times[1] - slack
    assert times[1] >= times[2] - slack


def test_a_strong_reading_visibly_delays_or_hurries() -> None:
    volume = np.full(20, 0.02)
    times = []
    for start in (5e4, 0.0, -5e4):
        orders = order(volume, participation=0.4, initial=start, feedback=0.0, urgency=0.2)
        times.append(_mean_time(_exactly(orders), orders) / orders.stages.theta.sum())
    assert times[0] > times[1] + 0.02
    assert times[1] > times[2] + 0.02


@given(seeds)
@some
def test_tighter_caps_never_help(seed: int) -> None:
    """The optimum over a smaller feasible set is no better."""
    orders = drawn(seed)
    tight = replace(orders, cap=np.minimum(orders.cap, orders.cap.max() * 0.9))
    if tight.cap.sum() < 1.02 * orders.quantity[0]:
        tight = replace(orders, cap=orders.cap * 1.1)  # then compare with looser ones
        orders, tight = tight, orders
    values = []
    for one in (orders, tight):
        problem = assemble(one)
        values.append(objective(problem, solve(problem, tolerance=1e-11).fractions))
    assert values[1] >= values[0] - 1e-8 * abs(values[0])


# batches and warm starts


@given(st.lists(seeds, min_size=2, max_size=8, unique=True))
@some
def test_a_batch_solves_each_order_as_alone(chosen: list[int]) -> None:
    """As alone to what the longer buckets' finer quadrature changes; each gap closed in it."""
    orders = [drawn(seed) for seed in chosen]
    problem = assemble(join(orders))
    solution = solve(problem, tolerance=1e-12)
    assert solution.converged.all()
    for i, one in enumerate(orders):
        _, at = problem.layout.take(np.array([i]))
        piece = solution.fractions[at]
        assert same(piece * one.quantity, _exactly(one), one.quantity[0])
        assert relative_gap(problem.take(np.array([i])), piece) < 1e-9


@given(st.lists(seeds, min_size=2, max_size=6, unique=True), seeds)
@some
def test_permuting_orders_permutes_their_schedules(chosen: list[int], by: int) -> None:
    orders = join([drawn(seed) for seed in chosen])
    turned = np.random.default_rng(by).permutation(len(chosen))
    _, at = orders.stages.layout.take(turned)
    permuted = _exactly(orders.take(turned))
    largest = float(orders.quantity.max())
    assert same(permuted, _exactly(orders)[at], largest, 1e-6)


@given(seeds)
@some
def test_a_reading_against_another_order_changes_no_schedule(seed: int) -> None:
    """One negative imbalance switches the whole batch to formulas that allow sign changes."""
    plain, other = drawn(seed), drawn(seed + 1, urgency=0.0)
    other = replace(other, initial=-0.5 * other.quantity)
    together = _exactly(join([plain, other]))
    assert same(together[: len(plain.cap)], _exactly(plain), plain.quantity[0])


def test_a_ceiling_of_an_order_that_is_done_first_leaves_nothing_behind() -> None:
    """When it is dropped from the batch, so are the ceilings; no array is left half filled."""
    done_first = drawn(3, urgency=0.0, exponent=1.0)
    ceiling = np.full(len(done_first.cap), np.inf)
    ceiling[-2] = 0.9 * done_first.quantity[0]
    done_first = replace(done_first, ceiling=ceiling)
    others = [drawn(seed, urgency=3.0, exponent=0.4) for seed in (1, 2)]
    problem = assemble(join([done_first, *others]))
    with patch.object(np, "empty_like", lambda a, *_, **__: np.full(a.shape, np.nan)):
        solution = solve(problem)
    assert solution.converged.all()
    assert solution.iterations[0] < solution.iterations[1:].max()


@pytest.mark.parametrize(("seed", "start"), [(290, -0.5), (1100, -0.1), (1920, -0.3)])
def test_a_reading_against_us_with_a_late_ceiling(seed: int, start: float) -> None:
    """delta = 0.3: |Z|^{1+delta} is sharply bent where the schedule lets Z rest at zero."""
    orders = drawn(seed, exponent=0.3, urgency=0.0)
    ceiling = np.full(len(orders.cap), np.inf)
    ceiling[-2] = 0.9 * orders.quantity[0]
    orders = replace(orders, initial=start * orders.quantity, ceiling=ceiling)
    assert solve(assemble(orders)).converged.all()


@given(seeds, st.floats(0.7, 1.3))
@some
def test_warm_start_gives_the_same_answer(seed: int, scaled: float) -> None:
    """From the optimum of another size and urgency; the driver restarts cold where it must."""
    orders = drawn(seed)
    near = replace(
        orders, quantity=orders.quantity * min(scaled, 1.05), urgency=orders.urgency + 0.2
    )
    start = driver(near, certify=False).shares
    warm = driver(orders, start=start, certify=False)
    cold = driver(orders, certify=False)
    assert warm.converged.all()
    problem = assemble(orders)
    values = [objective(problem, problem.fractions(s.shares)) for s in (warm, cold)]
    assert values[0] == pytest.approx(
        values[1], abs=5e-8 * size(problem, problem.fractions(cold.shares))
    )
    assert same(warm.shares, cold.shares, orders.quantity[0], 2e-3)


@pytest.mark.slow
@given(seeds)
@settings(max_examples=500, deadline=None)
def test_gap_is_closed_for_uncapped_orders_of_any_size(seed: int) -> None:
    """Uncapped, up to large against L: a KKT point at least, by the first-order gap."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(2, 80))
    orders = order(
        rng.uniform(0.2, 1.0, count) / count,
        quantity=10.0 ** rng.uniform(0, 5.7),
        urgency=float(rng.choice([0.0, 0.3, 2.0])),
        initial=float(rng.choice([0.0, 1e4, -1e4])),
        exponent=float(rng.choice([0.3, 0.489, 0.5, 0.6, 1.0, 2.0])),
    )
    problem = assemble(orders)
    solution = solve(problem)
    assert solution.converged.all()
    assert relative_gap(problem, solution.fractions) < 1e-7


def test_predictor_and_corrector_do_not_go_round_in_circles() -> None:
    """An order on which they once did, delta being 1."""
    assert solve(assemble(drawn(701, urgency=0.5))).converged.all()
