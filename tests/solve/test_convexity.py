"""The convexity test against a grid over what is attainable, and its bounds against schedules."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.solve.convexity import is_convex, node_bounds
from scheduler.solve.schedule import schedule
from tests.builders import join, order
from tests.solve.recomputed import objective
from tests.solve.varied import varied

seeds = st.integers(0, 2**32 - 1)
many = settings(max_examples=60, deadline=None)
_GRID = 60


def _drawn(seed: int) -> Orders:
    """Uncapped, loosely or tightly capped, with or without a reading, delta up to 1."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(2, 8))
    volume = rng.uniform(0.2, 1.0, count)
    volume /= volume.sum()
    quantity = 1e6 * 10.0 ** rng.uniform(-3.0, 0.3)
    room = rng.choice([1.1, 2.0, 10.0, np.inf])
    return order(
        volume,
        quantity=quantity,
        cap=volume * quantity * room,
        initial=float(rng.choice([0.0, 0.0, 0.5, -0.5])) * quantity,
        exponent=float(rng.choice([0.3, 0.5, 0.5, 0.6, 1.0])),
        feedback=float(rng.choice([0.3, 1.0, 3.0])),
        relaxation=10.0 ** rng.uniform(-2.0, 0.3),
    )


def _state(problem: Problem, y: Array) -> tuple[Array, Array]:
    """x and z at the nodes (J, M) of one order, bucket by bucket."""
    x, z = 1.0, float(problem.initial[0])
    xs, zs = [], []
    for t, part in enumerate(y):
        zs.append(problem.node_decay[:, t] * z + problem.node_gain[:, t] * part)
        xs.append(x - problem.node_share[:, t] * part)
        x, z = x - part, float(problem.decay[t] * z + problem.gain[t] * part)
    return np.array(xs).T, np.array(zs).T


def _largest_aversion(problem: Problem) -> float:
    """Lambda up to which every node's Hessian is positive semidefinite on a grid.

    At node j: h_zz = wi (1+d) d |z|^{d-1}, h_xx = 2 lambda (wr + wf |z|), h_xz = 2 lambda wf x,
    over 0 <= x <= X, 0 <= |z| <= Z and x + (|z| - |z_0|)^+ <= 1.
    """
    bounds = node_bounds(problem)
    delta, start = float(problem.exponent[0]), float(abs(problem.initial[0]))
    largest = np.inf
    for j, t in np.ndindex(bounds.x.shape):
        wi, wr, wf = (
            weight[j, t]
            for weight in (problem.impact_weight, problem.risk_weight, problem.feedback_weight)
        )
        if wf <= 0.0:
            continue
        z = np.append(np.linspace(0.0, 1.0, _GRID)[1:], np.geomspace(1e-6, 1.0, _GRID))
        z = z * bounds.z[j, t]
        x = np.minimum(bounds.x[j, t], 1.0 - np.maximum(z - start, 0.0))  # the largest is worst
        z, x = z[x > 0.0], x[x > 0.0]
        bend = wi * (1.0 + delta) * delta * z ** (delta - 1.0)
        # bend * 2 lambda (wr + wf z) >= (2 lambda wf x)^2
        largest = min(largest, float((bend * (wr + wf * z) / (2.0 * wf**2 * x**2)).min()))
    return largest


@given(seeds)
@many
def test_proven_exactly_where_the_grid_finds_no_indefinite_hessian(seed: int) -> None:
    """A grid point that fails is never proven; what a fine grid passes is, to its width."""
    problem = assemble(_drawn(seed))
    largest = _largest_aversion(problem)
    assert np.isfinite(largest)
    assert not is_convex(problem, np.array([largest * (1.0 + 1e-9)]))[0]
    assert is_convex(problem, np.array([0.9 * largest]))[0]


@pytest.mark.parametrize("seed", range(8))
def test_a_full_grid_in_both_directions_agrees(seed: int) -> None:
    """Eigenvalues of the 2 x 2 Hessian at every grid point of a problem just proven."""
    problem = assemble(_drawn(seed))
    aversion = 0.9 * _largest_aversion(problem)
    assert is_convex(problem, np.array([aversion]))[0]
    bounds = node_bounds(problem)
    delta, start = float(problem.exponent[0]), float(abs(problem.initial[0]))
    for j, t in np.ndindex(bounds.x.shape):
        wi, wr, wf = (
            weight[j, t]
            for weight in (problem.impact_weight, problem.risk_weight, problem.feedback_weight)
        )
        x, z = np.meshgrid(
            np.linspace(0.0, bounds.x[j, t], 15), np.linspace(1e-9, max(bounds.z[j, t], 1e-9), 15)
        )
        attainable = x + np.maximum(z - start, 0.0) <= 1.0
        h = np.empty((*x.shape, 2, 2))
        h[..., 0, 0] = 2.0 * aversion * (wr + wf * z)
        h[..., 0, 1] = h[..., 1, 0] = 2.0 * aversion * wf * x
        h[..., 1, 1] = wi * (1.0 + delta) * delta * z ** (delta - 1.0)
        least = np.linalg.eigvalsh(h[attainable])[:, 0]
        assert (least >= -1e-9 * np.abs(h[attainable]).max()).all()


@given(seeds)
@many
def test_no_schedule_leaves_the_bounds(seed: int) -> None:
    """Random schedules within the caps, lumpy and smooth, and those filled from either end."""
    problem = assemble(_drawn(seed))
    bounds = node_bounds(problem)
    start = float(abs(problem.initial[0]))
    cap = np.minimum(problem.cap, 1.0)
    rng = np.random.default_rng(seed)
    count = len(cap)
    orders = [np.arange(count), np.arange(count)[::-1], *(rng.permutation(count) for _ in range(8))]
    for way in orders:
        y = np.zeros(count)
        for t in way:
            y[t] = min(cap[t], 1.0 - y.sum()) * (1.0 if way is orders[0] else rng.uniform(0.5, 1))
        y += (1.0 - y.sum()) * (cap - y) / max((cap - y).sum(), 1e-300)
        x, z = _state(problem, y)
        assert (x <= bounds.x + 1e-9).all()
        assert (np.abs(z) <= bounds.z + 1e-9).all()
        assert (x + np.maximum(np.abs(z) - start, 0.0) <= 1.0 + 1e-9).all()


def test_the_bounds_are_reached() -> None:
    """As late as caps allow, x is at its bound; as early, z of the first bucket is."""
    problem = assemble(order([0.1, 0.2, 0.3], quantity=1e5, cap=[5e4, 4e4, 3e4]))
    bounds = node_bounds(problem)
    late, _ = _state(problem, np.array([0.3, 0.4, 0.3]))
    traded_at_first_node = np.array([0.4, 0.3]) * problem.node_share[0, 1:]
    assert late[0, 1:] == pytest.approx(bounds.x[0, 1:] - traded_at_first_node)
    _, early = _state(problem, np.array([0.5, 0.4, 0.1]))
    assert early[:, :2] == pytest.approx(bounds.z[:, :2])


@given(seeds)
@settings(max_examples=20, deadline=None)
def test_where_proven_the_objective_is_convex_between_schedules(seed: int) -> None:
    """C + lambda R half way between two random schedules is no more than their mean."""
    orders = varied(seed)
    if (orders.cap > 0.0).sum() < 2:
        return
    problem = assemble(orders)
    result = schedule(orders)
    aversion = result.risk_aversion * problem.scale
    if not is_convex(problem, aversion)[0]:
        return
    fixed = replace(problem, urgency=np.zeros(1), risk_aversion=aversion)
    cap = np.minimum(problem.cap, 1.0)
    rng = np.random.default_rng(seed)
    for _ in range(10):
        one, other = (_inside(rng.dirichlet(np.full(len(cap), 0.4)), cap) for _ in range(2))
        middle = objective(fixed, 0.5 * (one + other))
        ends = 0.5 * (objective(fixed, one) + objective(fixed, other))
        assert middle <= ends + 1e-9 * abs(ends)


def _inside(y: Array, cap: Array) -> Array:
    """Clipped to the caps and filled up to 1."""
    kept = np.minimum(y, cap)
    result: Array = kept + (1.0 - kept.sum()) * (cap - kept) / max((cap - kept).sum(), 1e-300)
    return result


def test_the_bounds_of_the_model_paper_hold() -> None:
    """Up to 0.2 ADV in a session, capped at 20 %, U <= 1.645: proven; uncapped at U = 1: not."""
    volume = np.full(26, 1.0 / 26)
    sizes = (0.001, 0.01, 0.05, 0.1, 0.2)
    capped = join(
        [
            order(volume, quantity=part * 1e6, participation=0.2, urgency=urgency)
            for part in sizes
            for urgency in (0.1, 0.5, 1.0, 1.645)
        ]
    )
    result = schedule(capped)
    assert {status.name for status in result.status} == {"PROVEN"}
    uncapped = schedule(order(volume, quantity=2e5, urgency=1.0))
    assert uncapped.status[0].name == "BOUNDED"


@pytest.mark.parametrize("exponent", [0.5, 1.0, 1.5])
def test_without_feedback_or_aversion_everything_is_convex(exponent: float) -> None:
    """With a feedback, an exponent above 1 loses its curvature at rest and is never proven."""
    plain = assemble(order([0.5, 0.5], exponent=exponent, feedback=0.0))
    assert is_convex(plain, np.array([1e6]))[0]
    fed = assemble(order([0.5, 0.5], exponent=exponent))
    assert is_convex(fed, np.zeros(1))[0]
    assert is_convex(fed, np.array([1e-9]))[0] == (exponent <= 1.0)
