"""One session's return as a Poisson mixture of normals: density and scores [Orrell 2020].

With n ~ Poisson(nu) energy levels the return is normal with mean m and variance
sigma_0^2 (1 + 2 n), so its variance is sigma_0^2 (1 + 2 nu) and its excess kurtosis
12 nu / (1 + 2 nu)^2.
"""

from __future__ import annotations

import numpy as np
from scipy.special import gammaln, logsumexp, pdtr, xlogy

from scheduler.model.ragged import Array

_TAIL = 1e-12


def log_weights(level_rate: float) -> Array:
    """(K,) log P(n = k), up to where less than 1e-12 is left."""
    count = np.arange(200.0)
    most = int(np.argmax(1.0 - pdtr(count, level_rate) < _TAIL)) + 1
    count = count[:most]
    result: Array = xlogy(count, level_rate) - level_rate - gammaln(count + 1.0)
    return result


def log_densities(returns: Array, mean: float, ground_vol: float, level_rate: float) -> Array:
    """(K, n) log of P(k) times the normal density given k levels."""
    weight = log_weights(level_rate)
    variance = ground_vol**2 * (1.0 + 2.0 * np.arange(len(weight)))
    square = (returns - mean) ** 2 / variance[:, None]
    result: Array = weight[:, None] - 0.5 * (square + np.log(2.0 * np.pi * variance)[:, None])
    return result


def log_likelihood(
    returns: Array, mean: float, ground_vol: float, level_rate: float
) -> tuple[float, Array]:
    """The log likelihood, and each return's score by (m, log sigma_0, log nu), (n, 3)."""
    parts = log_densities(returns, mean, ground_vol, level_rate)
    total = logsumexp(parts, axis=0)
    chance = np.exp(parts - total)  # of each number of levels, given the return
    count = np.arange(float(len(parts)))[:, None]
    variance = ground_vol**2 * (1.0 + 2.0 * count)
    away = returns - mean
    scores = (
        (chance * away / variance).sum(axis=0),
        (chance * (away**2 / variance - 1.0)).sum(axis=0),
        (chance * (count - level_rate)).sum(axis=0),
    )
    return float(total.sum()), np.stack(scores, axis=1)
