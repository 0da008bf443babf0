"""The certificate of a jointly planned list, recomputed from its problem and the schedule alone."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve import convexity
from scheduler.solve.evaluate import Evaluator
from scheduler.solve.optimality import linear_minimum, total_gradient
from scheduler.solve.rows import free_rows


@dataclass(frozen=True)
class JointCertificate:
    """Cost and variance of a list in the problem's unit, and how near the optimum it is.

    risk : all of it; factor_risk (K,) by orthonormal factor. size : impact and lambda Var, what gap
    and kkt_residual are relative to. excess : (n + S,) money by which each limited corridor or span
    is broken. convex : (N,) whether each name's part of the objective is convex, so that the gap
    proves an optimum.
    """

    cost: float
    risk: float
    factor_risk: Array
    risk_aversion: float
    objective: float
    size: float
    gap: float
    kkt_residual: float
    excess: Array
    convex: NDArray[np.bool_]


def certify(
    problem: Problem,
    coupling: Coupling,
    fractions: Array,
    *,
    urgency: float = 0.0,
    risk_aversion: float = 0.0,
    lower_price: Array | None = None,
    upper_price: Array | None = None,
    row_price: Array | None = None,
    level_weight: Array | None = None,
) -> JointCertificate:
    """Certify a schedule; multipliers of corridors and rows are witnesses, any give a bound.

    F(y) - F* <= G'y - min {G'v over caps and completion} + prices'(distance to the bounds), G the
    gradient of C + lambda R with corridors and rows priced in.

    level_weight : (J, M) weights of |z_j| in the variance, of convex relaxations.
    """
    layout, buckets = problem.layout, problem.layout.entries
    x = layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size)))
    z_after = layout.scan(problem.decay, problem.gain * fractions, problem.initial)
    point = Evaluator(problem, 1.0, level_weight).point(
        x, layout.before(z_after, problem.initial), fractions
    )
    exposure = coupling.exposures(x, fractions)
    factor_risk = (exposure**2).sum(axis=1)
    risk = float(point.risk.sum() + factor_risk.sum())
    aversion = risk_aversion + (0.5 * urgency / np.sqrt(risk) if risk > 0.0 else 0.0)
    by_x, by_y = coupling.pull_exposures(2.0 * aversion * exposure, buckets)
    slope = point.cost_slope + aversion * point.risk_slope
    slope[0] += by_x
    slope[2] += by_y
    lower, upper = coupling.bounds
    level = coupling.levels(x, fractions)
    low = np.zeros(len(lower)) if lower_price is None else np.where(lower > -np.inf, lower_price, 0)
    high = np.zeros(len(lower)) if upper_price is None else np.where(upper < np.inf, upper_price, 0)
    by_x, by_y = coupling.pull_levels(high - low, buckets)
    slope[0] += by_x
    slope[2] += by_y
    gradient = total_gradient(problem, slope)
    walls = _paid(low, level, lower) + _paid(high, upper, level)
    if row_price is not None:
        rows = free_rows(problem)
        gradient = gradient + rows.slope(row_price)
        walls = np.concatenate((walls, rows.paid(row_price, fractions)))
    least, marginal = linear_minimum(problem, gradient)
    size = float(point.avoidable.sum()) + aversion * risk
    reduced = gradient - marginal[layout.owner]
    room = np.minimum(problem.cap, 1.0) - fractions
    products = np.maximum(reduced * fractions, -reduced * room)
    cost = float(point.cost.sum())
    return JointCertificate(
        cost=cost,
        risk=risk,
        factor_risk=factor_risk,
        risk_aversion=aversion,
        objective=cost + urgency * np.sqrt(risk) + risk_aversion * risk,
        size=size,
        gap=float((gradient * fractions).sum() - least.sum() + walls.sum()) / size,
        kkt_residual=float(max(products.max(), np.abs(walls).max(initial=0.0))) / size,
        excess=np.maximum(np.maximum(lower - level, level - upper), 0.0),
        convex=convexity.is_convex(
            replace(problem, urgency=np.zeros(len(layout.size))),
            np.full(len(layout.size), aversion),
        ),
    )


def _paid(price: Array, above: Array, below: Array) -> Array:
    """price (above - below), 0 where there is no price (and perhaps no bound)."""
    priced = price > 0.0
    result = np.zeros(len(price))
    result[priced] = price[priced] * (above - below)[priced]
    return result
