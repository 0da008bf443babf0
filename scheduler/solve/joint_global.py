"""A list whose objective is not convex: the best of several starts, and a bound on any better one.

As for single orders (`schedule`): the non-convex term is scaled up from nothing, each solve
starting from the one before, and the answer is compared with those from other starts. The bound is
the better of the two convex relaxations of `convexity`, solved for the whole list at its lambda,
its own gap taken off.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve import joint
from scheduler.solve.convexity import relaxations
from scheduler.solve.joint import JointSolution
from scheduler.solve.joint_certificate import certify

_HOMOTOPY = (0.0, 0.1, 0.3, 1.0)


def best_of_starts(
    problem: Problem,
    coupling: Coupling,
    found: JointSolution,
    *,
    urgency: float,
    risk_aversion: float,
) -> JointSolution:
    """The solution of lowest objective among the one found and those from other starts."""
    best, least = found, _objective(problem, coupling, found, urgency, risk_aversion)
    for rival in _rivals(problem, coupling, urgency, risk_aversion):
        value = _objective(problem, coupling, rival, urgency, risk_aversion)
        if rival.converged and value < least:
            best, least = rival, value
    return best


def _rivals(
    problem: Problem, coupling: Coupling, urgency: float, risk_aversion: float
) -> Iterator[JointSolution]:
    """By a homotopy, and from schedules along the volume."""
    start = None
    for share in _HOMOTOPY:
        found = joint.solve(
            problem,
            coupling,
            urgency=urgency,
            risk_aversion=risk_aversion,
            start=start,
            feedback_share=share,
        )
        start = found.fractions if found.converged else None
    yield found
    layout = problem.layout
    total = layout.sum(problem.theta)
    pattern = np.where((total > 0.0)[layout.owner], problem.theta, 1.0)
    along = pattern / layout.sum(pattern)[layout.owner]
    yield joint.solve(problem, coupling, urgency=urgency, risk_aversion=risk_aversion, start=along)


def _objective(
    problem: Problem,
    coupling: Coupling,
    found: JointSolution,
    urgency: float,
    risk_aversion: float,
) -> float:
    fractions = np.clip(found.fractions, 0.0, problem.cap)
    return certify(
        problem, coupling, fractions, urgency=urgency, risk_aversion=risk_aversion
    ).objective


def lower_bound(
    problem: Problem, coupling: Coupling, risk_aversion: float, fractions: Array
) -> float:
    """A lower bound on min sum C_i + lambda R over all schedules, in the problem's unit."""
    best = -np.inf
    for relaxed, level_weight in relaxations(problem, fractions):
        found = joint.solve(
            relaxed,
            coupling,
            risk_aversion=risk_aversion,
            start=fractions,
            level_weight=level_weight,
        )
        proof = certify(
            relaxed,
            coupling,
            np.clip(found.fractions, 0.0, problem.cap),
            risk_aversion=risk_aversion,
            lower_price=found.lower_price,
            upper_price=found.upper_price,
            level_weight=level_weight,
        )
        if np.isfinite(proof.gap):
            best = max(best, proof.objective - proof.gap * proof.size)
    return best
