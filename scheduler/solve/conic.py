"""Orders one by one through a general conic solver: the reference, and the way in for further rows.

The programme is that of `scheduler.solve.conic_program`, one an order.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scheduler.problem import Problem
from scheduler.solve.conic_program import Aim, Program, Round, rounds
from scheduler.solve.interior import Solution
from scheduler.solve.optimality import duality_gap, objective_parts
from scheduler.solve.rows import FreeRows, free_rows, several


def solve(
    problem: Problem,
    *,
    feedback: bool = True,
    tolerance: float = 1e-8,
    most_rounds: int = 30,
) -> Solution:
    """Solve every order, one conic problem each; `iterations` are CLARABEL's, over all rounds.

    Parameters
    ----------
    feedback : whether the order's own imbalance adds to the variance.
    tolerance : CLARABEL's, on the relative gap and on violations in fractions of the order.
    most_rounds : rounds of majorisation; an order that needs more is not marked as converged.

    Raises
    ------
    MisuseError : a row over buckets of several orders.
    InfeasibleError : limits that clash; rows by name.
    NotConvergedError : CLARABEL ends in another state than `optimal`.
    """
    count, layout = len(problem.quantity), problem.layout
    rows = free_rows(problem)
    for name, owner in zip(rows.names, rows.owner, strict=True):
        if owner < 0:
            raise several(name)
    fractions, price = np.empty(layout.entries), np.empty(layout.entries)
    row_price = np.zeros((2, len(rows.names)))
    iterations, converged = np.zeros(count, dtype=np.int64), np.zeros(count, dtype=np.bool_)
    for order in range(count):
        at = slice(layout.first[order], layout.last[order] + 1)
        limits, which = rows.of_order(order, at)
        part = problem.take(np.array([order]))
        if not feedback:
            part = replace(part, feedback_weight=np.zeros_like(part.feedback_weight))
        found, steps, settled = _solve_one(part, limits, tolerance, most_rounds)
        fractions[at], price[at] = found.fractions, found.ceiling_price
        row_price[:, which] = found.row_price
        iterations[order], converged[order] = steps, settled
    return Solution(fractions, price, iterations, converged, row_price)


def _solve_one(
    order: Problem, rows: FreeRows, tolerance: float, most_rounds: int
) -> tuple[Round, int, bool]:
    aim = Aim(float(order.urgency[0]), float(order.risk_aversion[0]))

    def gap(found: Round) -> float:
        parts = objective_parts(order, found.fractions)
        prices = found.ceiling_price, found.row_price
        return float(duality_gap(order, parts, found.fractions, *prices, rows=rows)[0]) / found.size

    return rounds(Program(order, aim, rows, tolerance), most_rounds, gap)
