"""A list as one conic programme: the reference of `scheduler.solve.joint`, and the way in for rows.

The same problem, own imbalance in the variance included; rows may cover buckets of several orders.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scheduler.coupling import Coupling
from scheduler.errors import InfeasibleError
from scheduler.problem import Problem
from scheduler.solve.conic_program import Aim, Program, Round, rounds
from scheduler.solve.joint import JointSolution
from scheduler.solve.joint_certificate import JointCertificate, certify
from scheduler.solve.joint_feasible import smallest_violation
from scheduler.solve.rows import free_rows
from scheduler.solve.start import cold_start

_GAP = 1e-6  # largest recomputed gap of a schedule that counts as solved
_PATIENCE = 2
_KEPT = 1e-9  # of the largest gross: corridors broken by less can be kept


def solve(
    problem: Problem,
    coupling: Coupling,
    *,
    urgency: float = 0.0,
    risk_aversion: float = 0.0,
    feedback: bool = True,
    tolerance: float = 1e-10,
    most_rounds: int = 30,
) -> JointSolution:
    """Solve a list whose money is all in one unit; `iterations` are CLARABEL's, over all rounds.

    It is converged if its gap, recomputed from the schedule, is at most 1e-6. Corridors that no
    schedule keeps give a solution that is not converged, as they do in `joint`.

    Parameters
    ----------
    urgency, risk_aversion : U, and lambda in 1/unit, of the whole list.
    feedback : whether the orders' own imbalance adds to the variance.
    tolerance : CLARABEL's, on the relative gap and on violations in fractions of an order. Of lists
        it seldom gets there; where it stops short of it the recomputed gap decides.
    most_rounds : rounds of majorisation.

    Raises
    ------
    InfeasibleError : rows that clash, by name.
    NotConvergedError : CLARABEL ends in another state than `optimal`.
    """
    if not feedback:
        problem = replace(problem, feedback_weight=np.zeros_like(problem.feedback_weight))
    aim = Aim(urgency, risk_aversion)
    program = Program(problem, aim, free_rows(problem), tolerance, coupling)
    try:
        found, steps, _ = rounds(
            program,
            most_rounds,
            lambda found: _certificate(problem, coupling, aim, found).gap,
            patience=_PATIENCE,
        )
    except InfeasibleError:
        if _can_be_kept(problem, coupling):
            raise
        return _unsolved(problem, coupling)
    certificate = _certificate(problem, coupling, aim, found)
    return JointSolution(
        fractions=found.fractions,
        lower_price=found.level_price[0],
        upper_price=found.level_price[1],
        iterations=steps,
        gradient_steps=0,
        gap=certificate.gap,
        excess=float(certificate.excess.max(initial=0.0)),
        converged=bool(certificate.gap <= _GAP),
        row_price=found.row_price,
    )


def _certificate(problem: Problem, coupling: Coupling, aim: Aim, found: Round) -> JointCertificate:
    return certify(
        problem,
        coupling,
        found.fractions,
        urgency=aim.urgency,
        risk_aversion=aim.risk_aversion,
        lower_price=found.level_price[0],
        upper_price=found.level_price[1],
        row_price=found.row_price,
    )


def _can_be_kept(problem: Problem, coupling: Coupling) -> bool:
    """Whether some schedule keeps all corridors."""
    if not len(coupling.limited[0]):
        return True
    give = np.concatenate(smallest_violation(problem, coupling))
    return bool(give.max() <= _KEPT * coupling.money)


def _unsolved(problem: Problem, coupling: Coupling) -> JointSolution:
    none = np.zeros(len(coupling.bounds[0]))
    return JointSolution(cold_start(problem), none, none, 0, 0, np.inf, np.inf, converged=False)
