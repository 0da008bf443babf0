"""Optimality recomputed from the problem: states, gradients and gaps from the schedule alone.

Nothing here uses what the solver kept on its way. States are rebuilt from the fractions, the
gradient comes from the adjoint recursion, and the duality gap from the exact linear minimum over
the caps, found by sorting; multipliers of ceilings are only witnesses, any value gives a bound.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve.evaluate import Evaluator, Point
from scheduler.solve.rows import FreeRows, free_rows


@dataclass(frozen=True)
class Parts:
    """Objective at a schedule: `point`, lambda_k (N,), gradient of C + lambda_k R (M,)."""

    point: Point
    risk_aversion: Array
    gradient: Array
    size: Array


def implied_risk_aversion(problem: Problem, risk: Array) -> Array:
    """lambda + U/(2 sqrt R), (N,); U adds nothing to an order that carries no variance."""
    safe = np.where(risk > 0.0, risk, np.inf)
    result: Array = problem.risk_aversion + 0.5 * problem.urgency / np.sqrt(safe)
    return result


def total_gradient(problem: Problem, stage_slope: Array) -> Array:
    """Gradient by the fractions y, (M,), from slopes by (x_{t-1}, z_{t-1}, y_t): the adjoint.

    With l^z_t = slope^z_{t+1} + a_{t+1} l^z_{t+1} and l^x_t = slope^x_{t+1} + l^x_{t+1},
    dF/dy_t = slope^y_t + b_t l^z_t - l^x_t.
    """
    layout = problem.layout
    later = np.zeros((2, layout.entries))
    later[:, :-1] = stage_slope[:2, 1:]
    later[:, layout.last] = 0.0
    by_x = layout.reverse_cumsum(later[0])
    by_z = layout.reverse_scan(problem.decay, later[1])
    result: Array = stage_slope[2] + problem.gain * by_z - by_x
    return result


def objective_parts(
    problem: Problem, fractions: Array, *, level_weight: Array | None = None
) -> Parts:
    """Cost, variance and gradient at a schedule, all from the fractions."""
    layout = problem.layout
    z_after = layout.scan(problem.decay, problem.gain * fractions, problem.initial)
    x = layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size)))
    z = layout.before(z_after, problem.initial)
    point = Evaluator(problem, level_weight=level_weight).point(x, z, fractions)
    risk_aversion = implied_risk_aversion(problem, point.risk)
    slope = point.cost_slope + risk_aversion[layout.owner] * point.risk_slope
    size = point.avoidable + risk_aversion * np.abs(point.risk)
    return Parts(point, risk_aversion, total_gradient(problem, slope), size)


def objective(problem: Problem, parts: Parts) -> Array:
    """C + U sqrt(R) + lambda R, (N,) scaled units."""
    risk = parts.point.risk
    result: Array = (
        parts.point.cost + problem.urgency * np.sqrt(risk) + problem.risk_aversion * risk
    )
    return result


def duality_gap(
    problem: Problem,
    parts: Parts,
    fractions: Array,
    ceiling_price: Array,
    row_price: Array | None = None,
    *,
    rows: FreeRows | None = None,
) -> Array:
    """Bound on C + lambda_k R minus its minimum, (N,) scaled units, if it is convex.

    gap = G'y - min {G'v : 0 <= v <= cap, sum v = 1} + price'(ceiling - x) + row_price'(distance to
    the rows' bounds), G the gradient with ceilings and rows priced in. `rows` are the problem's,
    if at hand.
    """
    layout = problem.layout
    if row_price is not None and rows is None:
        rows = free_rows(problem)
    lagrangian, price = _lagrangian(problem, parts, ceiling_price, row_price, rows)
    left = 1.0 - layout.cumsum(fractions)
    room = np.where(price > 0.0, problem.ceiling, left) - left
    least, _ = linear_minimum(problem, lagrangian)
    result: Array = layout.sum(lagrangian * fractions + price * room) - least
    if row_price is not None and rows is not None:
        paid = rows.paid(row_price, fractions)
        result = result + np.bincount(rows.owner, paid, minlength=len(result))
    return result


def _lagrangian(
    problem: Problem,
    parts: Parts,
    ceiling_price: Array,
    row_price: Array | None,
    rows: FreeRows | None,
) -> tuple[Array, Array]:
    """Gradient with ceilings and rows priced in; ceilings' prices, none where there is none."""
    price = np.where(np.isfinite(problem.ceiling), ceiling_price, 0.0)
    gradient = parts.gradient
    if price.any():
        gradient = gradient - problem.layout.reverse_cumsum(price)
    if row_price is not None and rows is not None:
        gradient = gradient + rows.slope(row_price)
    return gradient, price


def linear_minimum(problem: Problem, slope: Array) -> tuple[Array, Array]:
    """Least slope'v over 0 <= v <= cap, sum v = 1, and the slope of the marginal bucket, (N,)."""
    layout = problem.layout
    order = np.lexsort((slope, layout.owner))
    cap = np.minimum(problem.cap, 1.0)[order]
    filled = np.clip(1.0 - (layout.cumsum(cap) - cap), 0.0, cap)
    marginal = layout.max(np.where(filled > 0.0, slope[order], -np.inf))
    return layout.sum(filled * slope[order]), marginal


def kkt_residual(
    problem: Problem,
    parts: Parts,
    fractions: Array,
    ceiling_price: Array,
    row_price: Array | None = None,
) -> Array:
    """Largest complementarity product relative to the objective's size, (N,).

    With nu the slope of the marginal bucket and multipliers (G - nu)^+ of y >= 0 and (nu - G)^+ of
    y <= cap, stationarity holds exactly and all that is left is complementarity.
    """
    layout = problem.layout
    rows = None if row_price is None else free_rows(problem)
    lagrangian, _ = _lagrangian(problem, parts, ceiling_price, row_price, rows)
    _, level = linear_minimum(problem, lagrangian)
    reduced = lagrangian - level[layout.owner]
    room = np.minimum(problem.cap, 1.0) - fractions
    result: Array = layout.max(np.maximum(reduced * fractions, -reduced * room)) / parts.size
    return result
