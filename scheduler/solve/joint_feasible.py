"""Corridors that no schedule keeps: which, when, and the smallest amounts by which they must give.

A linear programme with a slack on every bound: the least total violation, in money, over all
schedules within the caps. It is solved only where the interior-point method finds no feasible
point, so it may take a general solver and its time.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.coupling import Coupling, Spans
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem


def smallest_violation(problem: Problem, coupling: Coupling) -> tuple[Array, Array]:
    """How far each limited corridor must give way, (n,) below its lower and above its upper bound.

    Variables: x_{t-1}, y_t of every free bucket, and a slack of each bound.
    """
    from scipy import sparse  # noqa: PLC0415
    from scipy.optimize import linprog  # noqa: PLC0415

    buckets = problem.layout.entries
    count = len(coupling.limited[0])
    lower, upper = (bound[:count] for bound in coupling.bounds)
    level, constant = _level_rows(coupling, buckets)
    slack = sparse.identity(count, format="csr")
    nothing = sparse.csr_matrix((count, count))
    above = sparse.hstack((level, nothing, -slack), format="csr")
    below = sparse.hstack((-level, -slack, nothing), format="csr")
    bounded_above, bounded_below = np.isfinite(upper), np.isfinite(lower)
    spans, least = _span_rows(coupling, buckets), coupling.spans.least
    kept = sparse.hstack((-spans, sparse.csr_matrix((len(least), 2 * count))))
    inequality = sparse.vstack((above[bounded_above], below[bounded_below], kept))
    limit = np.concatenate(
        ((upper - constant)[bounded_above], (constant - lower)[bounded_below], -least)
    )
    equality, right = _dynamics(problem, 2 * count)
    cost = np.concatenate((np.zeros(2 * buckets), np.ones(2 * count)))
    cap = np.minimum(problem.cap, 1.0)
    bounds = np.concatenate(
        (
            np.column_stack((np.zeros(buckets), np.ones(buckets))),
            np.column_stack((np.zeros(buckets), cap)),
            np.column_stack((np.zeros(2 * count), np.full(2 * count, np.inf))),
        )
    )
    found = linprog(cost, inequality, limit, equality, right, bounds=bounds, method="highs")
    give = found.x[2 * buckets :]
    return give[:count], give[count:]


def _level_rows(coupling: Coupling, buckets: int) -> tuple[Any, Array]:
    """Sparse (n, 2M) map of (x, y) to the limited corridors, and their constants."""
    from scipy import sparse  # noqa: PLC0415

    rows, ends = coupling.limited
    at, inside = coupling.bucket[:, ends].T, (coupling.bucket[:, ends] >= 0).T
    weight = coupling.rows[rows] * inside
    line = np.broadcast_to(np.arange(len(rows))[:, None], at.shape)
    by_x = sparse.coo_matrix(
        (weight[inside], (line[inside], at[inside])), shape=(len(rows), buckets)
    )
    by_y = sparse.coo_matrix(
        ((-coupling.end[:, ends].T * weight)[inside], (line[inside], at[inside])),
        shape=(len(rows), buckets),
    )
    untouched = (coupling.rows[rows] * coupling.untouched[:, ends].T).sum(axis=1)
    return sparse.hstack((by_x, by_y), format="csr"), coupling.constant[rows] + untouched


def _span_rows(coupling: Coupling, buckets: int) -> Any:
    """Sparse (S, 2M) map of (x, y) to what is traded in each span."""
    from scipy import sparse  # noqa: PLC0415

    spans = coupling.spans
    line, one = np.arange(len(spans.least)), np.ones(len(spans.least))
    entries = (np.concatenate((one, -one, one)), (np.tile(line, 3), _columns(spans, buckets)))
    return sparse.coo_matrix(entries, shape=(len(line), 2 * buckets)).tocsr()


def _columns(spans: Spans, buckets: int) -> Index:
    """Columns of x_{first-1}, x_{last-1} and y_last."""
    result: Index = np.concatenate((spans.first, spans.last, spans.last + buckets))
    return result


def _dynamics(problem: Problem, slacks: int) -> tuple[Any, Array]:
    """x_t = x_{t-1} - y_t, x_0 = 1, all traded at the end: sparse equalities."""
    from scipy import sparse  # noqa: PLC0415

    layout, buckets = problem.layout, problem.layout.entries
    one = sparse.identity(buckets, format="csr")
    first = np.zeros(buckets)
    first[layout.first] = 1.0
    follows = np.flatnonzero(first == 0.0)
    shift = sparse.coo_matrix(
        (np.ones(len(follows)), (follows, follows - 1)), shape=(buckets, buckets)
    )
    states = sparse.hstack((one - shift, shift))
    names = np.arange(len(layout.size))
    ends = sparse.coo_matrix(
        (np.ones(len(names)), (names, layout.last)), shape=(len(names), buckets)
    )
    done = sparse.hstack((ends, -ends))
    matrix = sparse.vstack((states, done))
    padded = sparse.hstack((matrix, sparse.csr_matrix((matrix.shape[0], slacks))), format="csr")
    return padded, np.concatenate((first, np.zeros(len(names))))
