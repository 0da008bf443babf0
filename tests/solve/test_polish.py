"""Small names of a list: as near their own optimum, at the list's prices, as large ones."""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.solve import joint
from scheduler.solve.joint import JointSolution
from scheduler.solve.joint_certificate import certify
from scheduler.solve.polish import polish
from tests.builders import join, order
from tests.solve.lists import (
    Linked,
    corridors_around,
    feasible_fractions,
    gradient,
    level_matrix,
    linked,
)
from tests.solve.recomputed import cost_and_risk, least_linear


def uneven(seed: int, names: int = 12, buckets: int = 8) -> Linked:
    """Names of one size in shares whose prices run over six decades; the net within 2 %."""
    rng = np.random.default_rng(seed)
    prices = 100.0 * 10.0 ** np.linspace(-6.0, 0.0, names)
    orders = join(
        [
            order(
                volume / volume.sum(),
                quantity=rng.uniform(0.01, 0.05) * 1e6,
                participation=0.25,
                price=price,
                charge=1e-4 * price,
                vol=0.02,
            )
            for price, volume in zip(prices, rng.uniform(0.2, 1.0, (names, buckets)), strict=True)
        ]
    )
    loads = rng.standard_normal((names, 2))
    loads *= np.sqrt(0.5) * 0.02 / np.sqrt((loads**2).sum(axis=1, keepdims=True))
    listed = linked(orders, loads, side=rng.choice([-1, 1], names).tolist())
    return corridors_around(listed, feasible_fractions(listed.problem, seed), 1, 0.02, seed)


def own_gaps(listed: Linked, found: JointSolution, urgency: float) -> Array:
    """Gap of each name at the list's prices over its own impact and lambda Var, by plain loops."""
    problem, layout = listed.problem, listed.problem.layout
    y = np.clip(found.fractions, 0.0, problem.cap)
    matrix, _ = level_matrix(listed)
    slope = gradient(listed, y, urgency) + (found.upper_price - found.lower_price) @ matrix
    aversion = certify(problem, listed.coupling, y, urgency=urgency).risk_aversion
    result = np.empty(len(layout.size))
    for name in range(len(layout.size)):
        own = slice(layout.first[name], layout.last[name] + 1)
        cost, risk = cost_and_risk(problem.take(np.array([name])), y[own])
        impact = cost - problem.constant_cost[name] - problem.charge[own] @ y[own]
        gap = slope[own] @ y[own] - least_linear(slope[own], problem.cap[own])
        result[name] = gap / float(impact + aversion * risk)
    return result


@pytest.mark.parametrize("urgency", [0.3, 3.0])
@pytest.mark.parametrize("seed", [1, 2])
def test_small_names_reach_their_own_optimum(seed: int, urgency: float) -> None:
    """Without it they do not; objective, corridors and large names are as they were."""
    listed = uneven(seed)
    problem, coupling = listed.problem, listed.coupling
    plain = joint.solve(problem, coupling, urgency=urgency)
    better = polish(problem, coupling, plain, urgency=urgency)
    assert own_gaps(listed, plain, urgency).max() > 1e-3
    assert own_gaps(listed, better, urgency).max() < 5e-5
    one, other = (
        certify(
            problem,
            coupling,
            np.clip(found.fractions, 0.0, problem.cap),
            urgency=urgency,
            lower_price=found.lower_price,
            upper_price=found.upper_price,
        )
        for found in (plain, better)
    )
    assert other.objective == pytest.approx(one.objective, rel=2e-8)
    assert abs(other.gap) < 1e-7
    assert other.excess.max() <= 1e-8 * listed.gross
    last = problem.layout.first[-1]
    assert (better.fractions[last:] == plain.fractions[last:]).all()
    assert problem.layout.sum(better.fractions) == pytest.approx(1.0, abs=1e-9)


def test_small_names_are_where_a_far_tighter_solve_has_them() -> None:
    """Slices within 1e-4 of the order; without it the worst is off by more."""
    listed = uneven(3)
    problem, coupling = listed.problem, listed.coupling
    tight = joint.solve(problem, coupling, urgency=3.0, tolerance=1e-14, most_iterations=200)
    plain = joint.solve(problem, coupling, urgency=3.0)
    better = polish(problem, coupling, plain, urgency=3.0)
    off = [np.abs(found.fractions - tight.fractions).max() for found in (plain, better)]
    assert tight.converged
    assert off[0] > 2e-4
    assert off[1] < 1e-4


def test_names_of_one_size_are_left_alone() -> None:
    """Their gaps are small already: the solution itself comes back."""
    batch = [order([0.125] * 8, quantity=2e4, participation=0.25, vol=0.02) for _ in range(4)]
    listed = linked(batch, np.full((4, 1), 0.01), side=[1, -1, 1, -1])
    found = joint.solve(listed.problem, listed.coupling, urgency=1.0)
    assert polish(listed.problem, listed.coupling, found, urgency=1.0) is found
