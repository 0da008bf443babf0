"""When is C + lambda Var convex on the feasible set, and a bound on the optimum when it is not.

The only non-convex term is x^2 |z|. At a node with weights wi (impact), wr and wf (variance) the
Hessian in (x, z) is positive semidefinite exactly when

    wi (1+delta) delta |z|^{delta-1} (wr + wf |z|) >= 2 lambda wf^2 x^2.

Every node is tested at its worst attainable (x, |z|), with x + (|z| - |z_0|)^+ <= 1 and the caps; x
is raised by what never trades.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve import interior
from scheduler.solve.optimality import duality_gap, objective_parts


@dataclass(frozen=True)
class NodeBounds:
    """Largest attainable x and |z| at each node, (J, M)."""

    x: Array
    z: Array
    start: Array  # (M,) |z_0| of the order, and what of it never trades


def node_bounds(problem: Problem) -> NodeBounds:
    """Bounds on x_j and |z_j| over all feasible schedules, each taken alone."""
    layout, owner = problem.layout, problem.layout.owner
    cap = np.minimum(problem.cap, 1.0)
    later = layout.sum(cap)[owner] - layout.cumsum(cap) + cap  # what can still be traded
    ceiling = layout.before(problem.ceiling, np.ones(len(layout.size)))
    x_before = np.minimum(np.minimum(later, ceiling), 1.0)
    zero = np.zeros(len(layout.size))
    own_after = np.minimum(layout.scan(problem.decay, problem.gain * cap, zero), 1.0)
    own_before = layout.before(own_after, zero)
    start = np.abs(problem.initial)
    given_after = layout.scan(problem.decay, np.zeros(layout.entries), start)
    before = own_before + layout.before(given_after, start)
    z = problem.node_decay * before + problem.node_gain * cap
    held = problem.residual[owner]
    x = np.broadcast_to(x_before + held, z.shape)
    return NodeBounds(x, np.minimum(z, 1.0 + start[owner]), start[owner] + held)


def is_convex(problem: Problem, risk_aversion: Array) -> NDArray[np.bool_]:
    """Whether every node of each order passes the test at its lambda (scaled units), (N,)."""
    bounds = node_bounds(problem)
    owner = problem.layout.owner
    delta, wf, wr = problem.exponent[owner], problem.feedback_weight, problem.risk_weight
    strength = problem.impact_weight * (1.0 + delta) * delta
    demand = 2.0 * risk_aversion[owner] * wf * wf
    passes = np.ones(wf.shape, dtype=np.bool_)
    for x, z in _worst_points(bounds, delta, wr, wf):
        with np.errstate(divide="ignore", invalid="ignore"):
            supply = strength * z ** (delta - 1.0) * (wr + wf * z)
        supply = np.where((z <= 0.0) & (delta == 1.0), strength * wr, supply)
        passes &= (supply >= demand * x * x) | (demand == 0.0)
    # for delta > 1 the curvature of the impact vanishes with |z|
    passes &= (delta <= 1.0) | (demand == 0.0)
    result: NDArray[np.bool_] = np.logical_and.reduceat(passes.all(axis=0), problem.layout.first)
    return result


def _worst_points(
    bounds: NodeBounds, delta: Array, wr: Array, wf: Array
) -> tuple[tuple[Array, Array], tuple[Array, Array]]:
    """The two (x, |z|) at which supply/x^2 can be least.

    While |z| <= |z_0| + 1 - x_max, x = x_max and f(z) = z^{delta-1}(wr + wf z) is least at
    wr (1-delta)/(delta wf). Beyond, x = X - z with X = 1 + |z_0|, and d log(f/x^2)/dz = 0 is the
    quadratic wf (2-delta) z^2 + [delta wf X + (3-delta) wr] z - (1-delta) wr X = 0.
    """
    total = 1.0 + bounds.start
    knee = np.minimum(total - bounds.x, bounds.z)
    with np.errstate(divide="ignore", invalid="ignore"):
        flat = np.where(wf > 0.0, wr * (1.0 - delta) / (delta * wf), np.inf)
        a = wf * (2.0 - delta)
        b = delta * wf * total + (3.0 - delta) * wr
        root = 2.0 * (1.0 - delta) * wr * total
        root = root / (b + np.sqrt(b * b + 2.0 * a * root))
    first = np.clip(flat, 0.0, knee)
    second = np.clip(np.nan_to_num(root), knee, bounds.z)
    return (bounds.x, first), (np.minimum(bounds.x, total - second), second)


def lower_bound(problem: Problem, risk_aversion: Array, fractions: Array) -> Array:
    """A lower bound on min C + lambda R from convex relaxations, (N,) scaled units.

    The better of two: x^2|z| >= 0, and McCormick's x^2|z| >= X^2|z| + Z x^2 - X^2 Z with the node
    bounds X, Z, used where it is the larger of the two at the given schedule. Each relaxation is
    solved, and its own duality gap subtracted.
    """
    fixed = replace(problem, urgency=np.zeros_like(risk_aversion), risk_aversion=risk_aversion)
    plain, tilted = (
        _relaxed_optimum(relaxed, level_weight, fractions)
        for relaxed, level_weight in relaxations(fixed, fractions)
    )
    return np.maximum(plain, tilted)


def relaxations(
    problem: Problem, fractions: Array
) -> tuple[tuple[Problem, None], tuple[Problem, Array]]:
    """The two convex relaxations, each a problem and its weights of |z_j| in the variance."""
    bounds = node_bounds(problem)
    z, x = _node_state(problem, fractions)
    square = bounds.x * bounds.x
    chord = (square * np.abs(z) + bounds.z * x * x - square * bounds.z > 0.0).astype(float)
    weight = chord * problem.feedback_weight
    plain = replace(problem, feedback_weight=np.zeros_like(weight))
    constant = problem.layout.sum((weight * square * bounds.z).sum(axis=0))
    tilted = replace(
        plain,
        risk_weight=problem.risk_weight + weight * bounds.z,
        constant_risk=problem.constant_risk - constant,
    )
    return (plain, None), (tilted, weight * square)


def _relaxed_optimum(problem: Problem, level_weight: Array | None, start: Array) -> Array:
    solution = interior.solve(problem, level_weight=level_weight, start=start)
    parts = objective_parts(problem, solution.fractions, level_weight=level_weight)
    gap = duality_gap(problem, parts, solution.fractions, solution.ceiling_price)
    value = parts.point.cost + problem.risk_aversion * parts.point.risk
    return np.where(np.isfinite(gap), value - gap, -np.inf)


def _node_state(problem: Problem, fractions: Array) -> tuple[Array, Array]:
    layout = problem.layout
    z = layout.scan(problem.decay, problem.gain * fractions, problem.initial)
    x = layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size)))
    z_before = layout.before(z, problem.initial)
    return (
        problem.node_decay * z_before + problem.node_gain * fractions,
        x + problem.residual[layout.owner] - problem.node_share * fractions,
    )
