"""Objective, gradient and duality gap of one order, written out from the problem's formulas.

Gradients are complex-step derivatives: exact to rounding, and nothing shared with the solver.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.model.ragged import Array
from scheduler.problem import Problem


def cost_and_risk(problem: Problem, fractions: Any) -> tuple[Any, Any]:
    """C and R in scaled units, by the recursion over buckets; fractions may be complex."""
    x: Any = 1.0
    z: Any = problem.initial[0]
    cost: Any = problem.constant_cost[0]
    risk: Any = problem.constant_risk[0]
    power = 1.0 + problem.exponent[0]
    for t, y in enumerate(fractions):
        at = problem.node_decay[:, t] * z + problem.node_gain[:, t] * y
        left = x - problem.node_share[:, t] * y
        size = np.where(at.real < 0.0, -at, at)
        cost = cost + problem.charge[t] * y + (problem.impact_weight[:, t] * size**power).sum()
        rate = problem.risk_weight[:, t] + problem.feedback_weight[:, t] * size
        risk = risk + (left * left * rate).sum()
        x, z = x - y, problem.decay[t] * z + problem.gain[t] * y
    return cost, risk


def objective(problem: Problem, fractions: Array) -> float:
    """C + U sqrt(R) + lambda R."""
    cost, risk = cost_and_risk(problem, fractions)
    return float(cost + problem.urgency[0] * np.sqrt(risk) + problem.risk_aversion[0] * risk)


def gradient(problem: Problem, fractions: Array) -> Array:
    result = np.empty(len(fractions))
    for t in range(len(fractions)):
        step = fractions.astype(complex)
        step[t] += 1e-30j
        cost, risk = cost_and_risk(problem, step)
        aim = problem.urgency[0] * np.sqrt(risk) if problem.urgency[0] > 0.0 else 0.0
        result[t] = (cost + aim + problem.risk_aversion[0] * risk).imag / 1e-30
    return result


def size(problem: Problem, fractions: Array) -> float:
    """Impact plus lambda_k R, what the gap is relative to."""
    cost, risk = cost_and_risk(problem, fractions)
    impact = cost - problem.constant_cost[0] - problem.charge @ fractions
    implied = problem.urgency[0] / (2.0 * np.sqrt(risk)) if risk > 0.0 else 0.0
    return float(impact + (problem.risk_aversion[0] + implied) * risk)


def least_linear(slope: Array, cap: Array) -> float:
    """min slope'v over 0 <= v <= cap, sum v = 1: fill the cheapest buckets first."""
    total, missing = 0.0, 1.0
    for t in np.argsort(slope):
        taken = min(cap[t], missing)
        total += slope[t] * taken
        missing -= taken
    return total


def relative_gap(problem: Problem, fractions: Array, ceiling_price: Array | None = None) -> float:
    """G'y - min G'v, ceilings priced in: bounds the distance to the optimum of a convex problem.

    Any prices >= 0 give a bound, so that of a ceiling which does not exist is taken to be 0.
    """
    slope = gradient(problem, fractions)
    slack = 0.0
    if ceiling_price is not None:
        price = np.where(np.isfinite(problem.ceiling), ceiling_price, 0.0)
        room = np.where(price > 0.0, problem.ceiling, 0.0) - (1.0 - np.cumsum(fractions))
        slack = float(price @ room)
        slope = slope - np.cumsum(price[::-1])[::-1]
    gap = slope @ fractions - least_linear(slope, problem.cap) + slack
    return float(gap / size(problem, fractions))
