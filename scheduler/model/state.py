"""The imbalance state: decay, build-up and its path inside a bucket.

Own outstanding imbalance obeys dE = dq - E dV/L, V the others' cumulative volume (model 1 of
[AFS 2010]); a reading A relaxes at the same rate, so only Z = E + A is carried. With
theta = V_t/L and the slice spread evenly over the bucket's volume,

    Z(u) = Z_start e^{-theta u} + q (1 - e^{-theta u}) / theta,   u in [0, 1].
"""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array, Ragged

_SERIES_BELOW = 1e-2


def build_up(theta: Array) -> Array:
    """(1 - e^{-theta})/theta, the share of an evenly spread slice left at the end; 1 at 0."""
    safe = np.where(theta > 0.0, theta, 1.0)
    return np.where(theta > 0.0, -np.expm1(-safe) / safe, 1.0)


def faded(theta: Array) -> Array:
    """1 - build_up(theta), without cancellation for small theta."""
    series = theta * (1 / 2 - theta * (1 / 6 - theta * (1 / 24 - theta * (1 / 120 - theta / 720))))
    return np.where(theta < _SERIES_BELOW, series, 1.0 - build_up(theta))


def reach_back(theta: Array) -> Array:
    """theta/(e^theta - 1) = e^{-theta}/build_up(theta); 1 at 0, no overflow for large theta."""
    return np.exp(-theta) / build_up(theta)


def reach_back_short(theta: Array) -> Array:
    """1 - reach_back(theta), without cancellation for small theta."""
    square = theta * theta
    series = theta / 2 - square / 12 + square * square / 720
    return np.where(theta < _SERIES_BELOW, series, 1.0 - reach_back(theta))


def imbalance(layout: Ragged, theta: Array, shares: Array, initial: Array) -> tuple[Array, Array]:
    """Total imbalance Z before and after each stage.

    Parameters
    ----------
    layout : orders laid end to end, M stages in all, N orders.
    theta : (M,) V_t/L; for a closed period omega/r.
    shares : (M,) slices q_t.
    initial : (N,) Z at time zero, signed in the order's own direction.

    Returns
    -------
    before, after : (M,) shares.
    """
    after = layout.scan(np.exp(-theta), build_up(theta) * shares, initial)
    return layout.before(after, initial), after


def imbalance_at(fraction: Array, theta: Array, before: Array, shares: Array) -> Array:
    """Z(u) at fractions u (J, M or J, 1) of each stage, (J, M)."""
    time = theta * fraction
    grown = np.where(theta > 0.0, -np.expm1(-time) / np.where(theta > 0.0, theta, 1.0), fraction)
    return before * np.exp(-time) + shares * grown
