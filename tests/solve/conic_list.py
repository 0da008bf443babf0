"""The joint problem once more, as a cone programme: states as variables, solved by Clarabel."""

from __future__ import annotations

from typing import Any
from warnings import catch_warnings, simplefilter

import numpy as np

from scheduler.model.ragged import Array
from tests.solve.lists import Linked


def conic_fractions(listed: Linked, *, urgency: float = 0.0, risk_aversion: float = 0.0) -> Array:
    """Fractions that minimise C + U sqrt(R) + lambda R, R without feedback; delta = 1/2."""
    import cvxpy as cp

    problem, layout = listed.problem, listed.problem.layout
    assert not problem.feedback_weight.any()
    assert (problem.exponent == 0.5).all()
    count = layout.entries
    x, z, y = cp.Variable(count), cp.Variable(count), cp.Variable(count, nonneg=True)
    first, last = layout.first, layout.last
    later = np.setdiff1d(np.arange(count), first)
    rules = [
        x[first] == 1.0,
        z[first] == problem.initial,
        x[last] == y[last],
        y <= np.minimum(problem.cap, 1.0),
    ]
    if len(later):
        ago = later - 1
        decayed = cp.multiply(problem.decay[ago], z[ago])
        rules += [
            x[later] == x[ago] - y[ago],
            z[later] == decayed + cp.multiply(problem.gain[ago], y[ago]),
        ]
    cost, squares = problem.charge @ y + problem.constant_cost.sum(), _factor_parts(listed, x, y)
    for node in range(len(problem.node_share)):
        level = cp.multiply(problem.node_decay[node], z) + cp.multiply(problem.node_gain[node], y)
        at = np.flatnonzero(problem.impact_weight[node] > 0.0)
        cost += problem.impact_weight[node][at] @ cp.power(level[at], 1.5)
        kept = x - cp.multiply(problem.node_share[node], y)
        squares.append(cp.multiply(np.sqrt(problem.risk_weight[node]), kept))
    squares.append(np.sqrt([problem.constant_risk.sum()]))
    rules += _corridors(listed, x, y)
    risk = cp.hstack(squares)
    aim = cost + urgency * cp.norm(risk) + risk_aversion * cp.sum_squares(risk)
    programme = cp.Problem(cp.Minimize(aim), rules)
    with catch_warnings():
        simplefilter("ignore")  # it may stop a little short of its tolerance
        programme.solve(solver="CLARABEL")
    assert programme.status in ("optimal", "optimal_inaccurate")
    fractions = np.clip(y.value, 0.0, problem.cap)
    result: Array = fractions / layout.sum(fractions)[layout.owner]
    return result


def _kept(listed: Linked, x: Any, y: Any, share: Array) -> Any:
    """(N, T) x once `share` of each interval's bucket is done."""
    import cvxpy as cp

    bucket = listed.coupling.bucket
    moves = np.where(bucket >= 0, 1.0, 0.0)
    flat = np.maximum(bucket, 0).ravel()
    before = cp.reshape(x[flat], bucket.shape, order="C")
    slices = cp.reshape(y[flat], bucket.shape, order="C")
    waiting = np.where(bucket == -1, 1.0, 0.0)
    return cp.multiply(moves, before - cp.multiply(share, slices)) + waiting


def _factor_parts(listed: Linked, x: Any, y: Any) -> list[Any]:
    """Vectors whose squares add up to the factors' variance: two Gauss points of every interval."""
    import cvxpy as cp

    coupling = listed.coupling
    if not coupling.loadings.shape[1]:
        return []
    parts = []
    for point in (0.5 - np.sqrt(1.0 / 12.0), 0.5 + np.sqrt(1.0 / 12.0)):
        share = coupling.begin + point * (coupling.end - coupling.begin)
        held = cp.multiply(coupling.weight * np.sqrt(0.5), _kept(listed, x, y, share))
        parts.append(cp.vec(coupling.loadings.T @ held, order="C"))
    return parts


def _corridors(listed: Linked, x: Any, y: Any) -> list[Any]:
    """Bounds in parts of the gross, so that rows of money do not spoil the solver's scaling."""
    coupling = listed.coupling
    if not len(coupling.rows):
        return []
    unit = listed.gross
    level = (coupling.rows / unit) @ _kept(listed, x, y, coupling.end)
    level = level + coupling.constant[:, None] / unit
    rules = []
    for bound, sign in ((coupling.lower, 1.0), (coupling.upper, -1.0)):
        at = np.nonzero(np.isfinite(bound))
        if len(at[0]):
            rules.append(sign * level[at] >= sign * bound[at] / unit)
    return rules
