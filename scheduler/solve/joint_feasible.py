"""Corridors that no schedule keeps: which, when, and the smallest amounts by which they must give.

A linear programme with a slack on every bound: the least total violation, in money, over all
schedules within the caps. It is solved only where the interior-point method finds no feasible
point, so it may take a general solver and its time.
"""

from __future__ import annotations

import numpy as np

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve.linear import dynamics, level_map


def smallest_violation(problem: Problem, coupling: Coupling) -> tuple[Array, Array]:
    """How far each limited corridor must give way, (n,) below its lower and above its upper bound.

    Variables: x_{t-1}, y_t of every free bucket, and a slack of each bound.
    """
    from scipy import sparse  # noqa: PLC0415
    from scipy.optimize import linprog  # noqa: PLC0415

    buckets = problem.layout.entries
    count = len(coupling.limited[0])
    lower, upper = (bound[:count] for bound in coupling.bounds)
    levels, constants = level_map(coupling, buckets)
    level, constant = levels[:count], constants[:count]
    slack = sparse.identity(count, format="csr")
    nothing = sparse.csr_matrix((count, count))
    above = sparse.hstack((level, nothing, -slack), format="csr")
    below = sparse.hstack((-level, -slack, nothing), format="csr")
    bounded_above, bounded_below = np.isfinite(upper), np.isfinite(lower)
    spans, least = levels[count:], coupling.bounds[0][count:]
    kept = sparse.hstack((-spans, sparse.csr_matrix((len(least), 2 * count))))
    inequality = sparse.vstack((above[bounded_above], below[bounded_below], kept))
    limit = np.concatenate(
        ((upper - constant)[bounded_above], (constant - lower)[bounded_below], -least)
    )
    equality, right = dynamics(problem)
    free = sparse.csr_matrix((equality.shape[0], 2 * count))
    cost = np.concatenate((np.zeros(2 * buckets), np.ones(2 * count)))
    cap = np.minimum(problem.cap, 1.0)
    bounds = np.concatenate(
        (
            np.column_stack((np.zeros(buckets), np.ones(buckets))),
            np.column_stack((np.zeros(buckets), cap)),
            np.column_stack((np.zeros(2 * count), np.full(2 * count, np.inf))),
        )
    )
    whole = sparse.hstack((equality, free), format="csr")
    found = linprog(cost, inequality, limit, whole, right, bounds=bounds, method="highs")
    give = found.x[2 * buckets :]
    return give[:count], give[count:]
