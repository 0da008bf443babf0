"""The joint problem written for a general conic solver: the baseline of the list benchmarks.

Vectorised expressions only, a sparse chain of states, powers as power cones, all risk as one norm:
the best of the forms tried. Without feedback, which conic solvers cannot express.
"""

from __future__ import annotations

import numpy as np

from scheduler.coupling import Coupling
from scheduler.problem import Problem


def solve_reference(
    problem: Problem, coupling: Coupling, *, urgency: float, tolerance: float = 1e-8
) -> np.ndarray:
    """Fractions of every name by CVXPY and Clarabel."""
    import cvxpy as cp  # noqa: PLC0415

    layout = problem.layout
    buckets = layout.entries
    x, z, y = cp.Variable(buckets), cp.Variable(buckets), cp.Variable(buckets, nonneg=True)
    later = np.setdiff1d(np.arange(buckets), layout.first)
    limits = [
        x[layout.first] == 1.0,
        z[layout.first] == problem.initial,
        x[later] == x[later - 1] - y[later - 1],
        z[later]
        == cp.multiply(problem.decay[later - 1], z[later - 1])
        + cp.multiply(problem.gain[later - 1], y[later - 1]),
        x[layout.last] == y[layout.last],
        y <= problem.cap,
    ]
    cost, noise = problem.charge @ y, []
    for decay, gain, share, paid, risk in zip(
        problem.node_decay,
        problem.node_gain,
        problem.node_share,
        problem.impact_weight,
        problem.risk_weight,
        strict=True,
    ):
        level = cp.multiply(decay, z) + cp.multiply(gain, y)
        at = np.flatnonzero(paid > 0.0)
        cost = cost + paid[at] @ cp.power(level[at], 1.5)
        at = np.flatnonzero(risk > 0.0)
        left = x - cp.multiply(share, y)
        noise.append(cp.multiply(np.sqrt(risk[at]), left[at]))
    before = cp.reshape(x[coupling.at.ravel()], coupling.at.shape, order="C")
    slices = cp.reshape(y[coupling.at.ravel()], coupling.at.shape, order="C")
    middle = before - cp.multiply(coupling.middle, slices)
    exposed = coupling.loadings.T @ cp.multiply(coupling.weight, middle)
    moved = coupling.loadings.T @ cp.multiply(coupling.weight * coupling.span, slices)
    noise += [cp.vec(exposed, order="C"), cp.vec(moved, order="C")]
    level = coupling.rows @ (before - cp.multiply(coupling.end, slices))
    for side, bound in ((1.0, coupling.upper), (-1.0, -coupling.lower)):
        finite = np.isfinite(bound)
        limits.append(side * level[finite] <= bound[finite])
    program = cp.Problem(cp.Minimize(cost + urgency * cp.norm(cp.hstack(noise))), limits)
    program.solve(cp.CLARABEL, tol_gap_abs=tolerance, tol_gap_rel=tolerance, tol_feas=tolerance)
    fractions: np.ndarray = np.clip(y.value, 0.0, problem.cap)
    return fractions / layout.sum(fractions)[layout.owner]
