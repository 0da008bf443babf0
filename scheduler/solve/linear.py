"""What is linear in a schedule, as sparse matrices over (x_{t-1}, y_t) of every free bucket.

For general solvers, which want matrices; the project's own never build them.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem


def dynamics(problem: Problem) -> tuple[Any, Array]:
    """x_t = x_{t-1} - y_t, x_0 = 1, all traded at the end: (M + N, 2M) equalities, right sides."""
    from scipy import sparse  # noqa: PLC0415

    layout, buckets = problem.layout, problem.layout.entries
    one = sparse.identity(buckets, format="csr")
    first = np.zeros(buckets)
    first[layout.first] = 1.0
    follows = np.flatnonzero(first == 0.0)
    shift = sparse.coo_matrix(
        (np.ones(len(follows)), (follows, follows - 1)), shape=(buckets, buckets)
    )
    last = picked(layout.last, buckets)
    states = sparse.hstack((one - shift, shift))
    matrix = sparse.vstack((states, sparse.hstack((last, -last))), format="csr")
    return matrix, np.concatenate((first, np.zeros(len(layout.size))))


def picked(at: Index, buckets: int) -> Any:
    """(n, M) sparse map to some of the buckets."""
    from scipy import sparse  # noqa: PLC0415

    return sparse.coo_matrix(
        (np.ones(len(at)), (np.arange(len(at)), at)), shape=(len(at), buckets)
    ).tocsr()


def due(problem: Problem) -> Index:
    """The buckets after which a ceiling asks for less than all to be left."""
    asked = problem.ceiling < 1.0
    asked[problem.layout.last] = False  # nothing is left there
    return np.flatnonzero(asked)


def level_map(coupling: Coupling, buckets: int) -> tuple[Any, Array]:
    """Sparse (n + S, 2M) map to the limited corridors and the spans, and their constants."""
    from scipy import sparse  # noqa: PLC0415

    rows, ends = coupling.limited
    weight = coupling.rows[rows] * (coupling.bucket[:, ends] >= 0).T
    end = coupling.end[:, ends].T
    matrix = _gathered(coupling.at[:, ends].T, weight, -end * weight, buckets)
    untouched = (coupling.rows[rows] * coupling.untouched[:, ends].T).sum(axis=1)
    spans = coupling.spans
    to_first, to_last = picked(spans.first, buckets), picked(spans.last, buckets)
    traded = coupling.money * sparse.hstack((to_first - to_last, to_last))
    constant = np.concatenate((coupling.constant[rows] + untouched, np.zeros(len(spans.least))))
    return sparse.vstack((matrix, traded), format="csr"), constant


def exposure_map(coupling: Coupling, buckets: int) -> tuple[Any, Array]:
    """Sparse (2TK, 2M) map to the factors' exposures, and their constants: `exposures`, raveled."""
    from scipy import sparse  # noqa: PLC0415

    weight = (coupling.weight * coupling.inside)[None] * coupling.loadings.T[:, :, None]
    factors, names, half = weight.shape
    by_interval = weight.transpose(0, 2, 1).reshape(factors * half, names)
    at = np.tile(coupling.at.T, (factors, 1))
    parts = [
        _gathered(at, by_x * by_interval, np.tile(by_y.T, (factors, 1)) * by_interval, buckets)
        for by_x, by_y in ((1.0, -coupling.middle), (0.0, -coupling.span))
    ]
    nothing = np.zeros(buckets)
    constant = coupling.exposures(nothing, nothing)
    both = np.concatenate((constant[:, :half].ravel(), constant[:, half:].ravel()))
    return sparse.vstack(parts, format="csr"), both


def _gathered(at: Index, by_x: Array, by_y: Array, buckets: int) -> Any:
    """(n, 2M) map of rows that are sums over names: bucket and coefficients (n, N) of each."""
    from scipy import sparse  # noqa: PLC0415

    line = np.broadcast_to(np.arange(len(at))[:, None], at.shape)
    places = np.concatenate((at.ravel(), buckets + at.ravel()))
    values = np.concatenate((by_x.ravel(), by_y.ravel()))
    found = sparse.coo_matrix(
        (values, (np.tile(line.ravel(), 2), places)), shape=(len(at), 2 * buckets)
    ).tocsr()
    found.eliminate_zeros()
    return found
