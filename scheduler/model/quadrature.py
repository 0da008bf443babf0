"""Quadrature nodes inside a bucket, where the imbalance relaxes at rate theta.

An order that starts from rest has Z growing like u from the start of a bucket, and
|Z|^{1+delta} is not smooth there. Gauss-Legendre in s = sqrt(u) is exact for u^{3/2} and
for polynomials, and converges like an ordinary Gauss rule elsewhere. Measured worst error of
theta * integral |Z|^{1+delta} du, relative to Q^{1+delta}, over delta in 0.3..2 and all mixes of
old and new imbalance: 5e-6 with 4 nodes at theta <= 1/2, 2e-6 with 6 at theta <= 2, 2e-7 with 8 at
theta <= 4 (tests/model/test_quadrature.py). Longer buckets are cut at theta u = 4, 8, 16, 32, 64:
beyond the last cut the imbalance is stationary to rounding.
"""

from __future__ import annotations

from functools import lru_cache
from itertools import pairwise

import numpy as np

from scheduler.model.ragged import Array

_COUNT_BY_THETA = ((0.5, 4), (2.0, 6), (4.0, 8))
_CUTS = (4.0, 8.0, 16.0, 32.0, 64.0)
_TAIL_NODES = 6


@lru_cache(maxsize=16)
def rooted(count: int) -> tuple[Array, Array]:
    """Gauss-Legendre in s = sqrt(u) on [0, 1]: fractions u and weights for du = 2 s ds."""
    point, weight = np.polynomial.legendre.leggauss(count)
    s = (point + 1.0) / 2.0
    return s * s, weight * s


@lru_cache(maxsize=16)
def plain(count: int) -> tuple[Array, Array]:
    """Gauss-Legendre on [0, 1]."""
    point, weight = np.polynomial.legendre.leggauss(count)
    return (point + 1.0) / 2.0, weight / 2.0


def node_class(largest_theta: Array) -> Array:
    """Rank of the rule that buckets up to this theta need; orders of one rank share nodes."""
    edges = np.array([limit for limit, _ in _COUNT_BY_THETA] + list(_CUTS[1:]))
    return np.searchsorted(edges, largest_theta).astype(float)


def nodes(theta: Array, fewest: int = 4) -> tuple[Array, Array]:
    """Fractions u in [0, 1] and weights (sum 1) per bucket.

    Parameters
    ----------
    theta : (M,) relaxation over each bucket, V_t / L.
    fewest : at least so many nodes in the first piece.

    Returns
    -------
    fraction, weight : (J, M), or (J, 1) where all buckets share one rule.
    """
    largest = float(theta.max(initial=0.0))
    count = max(fewest, next((n for limit, n in _COUNT_BY_THETA if largest <= limit), 8))
    fraction, weight = rooted(count)
    if largest <= _CUTS[0]:
        return fraction[:, None], weight[:, None]
    return _graded(theta, largest, fraction, weight)


def _graded(theta: Array, largest: float, fraction: Array, weight: Array) -> tuple[Array, Array]:
    """Pieces [0, 4], [4, 8], ... in theta u; a piece beyond a bucket's end has length 0."""
    with np.errstate(divide="ignore"):
        edges = [np.minimum(cut / theta, 1.0) for cut in _CUTS if cut < 2.0 * largest]
    edges.append(np.ones_like(theta))
    us, ws = [fraction[:, None] * edges[0]], [weight[:, None] * edges[0]]
    point, mass = plain(_TAIL_NODES)
    for left, right in pairwise(edges):
        us.append(left + point[:, None] * (right - left))
        ws.append(mass[:, None] * (right - left))
    return np.concatenate(us), np.concatenate(ws)
