"""The distribution of cost: a Poisson mixture of normals [Orrell 2020].

One energy level n_d ~ Poisson(nu) per session d, independent between sessions. Given the levels
the cost is normal with mean C and variance sum_d (a_d + 2 n_d b_d): fat tails, and the same mean
and variance as the plain model. With few sessions the mixture is summed; with many its
characteristic function exp(iCt) prod_d exp(-a_d t^2/2 + nu (e^{-b_d t^2} - 1)) is inverted.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import product

import numpy as np
from scipy.special import ndtr, pdtr, xlogy

from scheduler.model.ragged import Array

_TAIL = 1e-12
_MOST_COMBINATIONS = 5_000  # beyond, inverting is faster
_BISECTIONS = 80
_INVERSION_POINTS = 4000


@dataclass(frozen=True)
class CostDistribution:
    """Distribution of the cost of N orders that see the same D sessions.

    Parameters
    ----------
    mean : (N,) expected cost C.
    base : (D, N) variance of each session with energy levels at their mean, (1 + 2 nu) b_d.
    own : (D, N) variance from the orders' own imbalance and readings.
    level_rate : (N,) nu.
    """

    mean: Array
    base: Array
    own: Array
    level_rate: Array

    @cached_property
    def std(self) -> Array:
        """Standard deviation; equal to that of the model without levels."""
        result: Array = np.sqrt((self.base + self.own).sum(axis=0))
        return result

    @cached_property
    def _per_level(self) -> Array:
        result: Array = self.base / (1.0 + 2.0 * self.level_rate)
        return result

    @cached_property
    def _levels(self) -> Array | None:
        """(K, D) combinations of levels, or None where they are too many."""
        most = np.arange(200)
        beyond = 1.0 - pdtr(most, self.level_rate.max(initial=0.0))
        top = int(np.argmax(beyond < _TAIL))
        sessions = len(self.base)
        if (top + 1) ** sessions > _MOST_COMBINATIONS:
            return None
        return np.array(list(product(range(top + 1), repeat=sessions)), dtype=float)

    @cached_property
    def _components(self) -> tuple[Array, Array]:
        """(K, N) weights and standard deviations of the normals."""
        levels = self._levels
        assert levels is not None
        log_factorial = np.concatenate(([0.0], np.cumsum(np.log(np.arange(1.0, 201.0)))))
        count = levels.sum(axis=1)[:, None]
        log_weight = xlogy(count, self.level_rate) - len(self.base) * self.level_rate
        log_weight -= log_factorial[levels.astype(int)].sum(axis=1)[:, None]
        weight = np.exp(log_weight)
        fixed = (self._per_level + self.own).sum(axis=0)
        spread = np.sqrt(fixed + 2.0 * levels @ self._per_level)
        return weight / weight.sum(axis=0), spread

    def cdf(self, cost: Array) -> Array:
        """P(cost <= given), (N,); a step where the variance is nil."""
        away = cost - self.mean
        if self._levels is None:
            return self._inverted_cdf(away)
        weight, spread = self._components
        with np.errstate(divide="ignore", invalid="ignore"):
            z = np.where(spread > 0.0, away / spread, np.where(away >= 0.0, np.inf, -np.inf))
        result: Array = (weight * ndtr(z)).sum(axis=0)
        return result

    def _inverted_cdf(self, away: Array) -> Array:
        """1/2 + (1/pi) int_0^inf sin(t away)/t phi(t) dt (Gil-Pelaez; the law is symmetric).

        phi falls like a normal's, so the trapezoidal rule converges geometrically.
        """
        std = np.where(self.std > 0.0, self.std, 1.0)
        narrow = np.sqrt((self._per_level + self.own).sum(axis=0)) / std
        step = 8.6 / np.maximum(narrow, 1e-3) / _INVERSION_POINTS
        t = np.arange(1, _INVERSION_POINTS + 1)[:, None] * step
        phi = self._characteristic(t / std)
        z = away / std
        total = (np.sin(t * z) / t * phi).sum(axis=0) + 0.5 * z
        return np.where(self.std > 0.0, 0.5 + total * step / np.pi, (away >= 0.0).astype(float))

    def _characteristic(self, t: Array) -> Array:
        square = t * t
        exponent = -0.5 * (self._per_level + self.own).sum(axis=0) * square
        for b in self._per_level:
            exponent = exponent + self.level_rate * np.expm1(-b * square)
        result: Array = np.exp(exponent)
        return result

    def quantile(self, probability: float) -> Array:
        """Cost not exceeded with the given probability, (N,)."""
        reach = self.std / np.sqrt(min(probability, 1.0 - probability))  # Chebyshev's inequality
        low, high = self.mean - reach, self.mean + reach
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            below = self.cdf(middle) < probability
            low, high = np.where(below, middle, low), np.where(below, high, middle)
        result: Array = np.where(self.std > 0.0, 0.5 * (low + high), self.mean)
        return result

    def expected_shortfall(self, probability: float) -> Array:
        """Mean cost beyond the quantile, (N,).

        For a normal of sd s at distance q from the mean, E[(X - mean); X > mean + q] = s phi(q/s).
        """
        q = self.quantile(probability) - self.mean
        if self._levels is None:
            return self._inverted_shortfall(probability, q)
        weight, spread = self._components
        safe = np.where(spread > 0.0, spread, 1.0)
        density = np.exp(-0.5 * (q / safe) ** 2) / np.sqrt(2.0 * np.pi)
        result: Array = self.mean + (weight * spread * density).sum(axis=0) / (1.0 - probability)
        return result

    def _inverted_shortfall(self, probability: float, q: Array) -> Array:
        """mean + q + int_q^inf P(X - mean > y) dy / (1 - p), Gauss-Legendre over 40 sd."""
        point, mass = np.polynomial.legendre.leggauss(64)
        beyond = np.zeros_like(q)
        for fraction, weight in zip((point + 1.0) / 2.0, mass / 2.0, strict=True):
            reach = 40.0 * self.std * fraction**2
            beyond += weight * 80.0 * self.std * fraction * (1.0 - self._inverted_cdf(q + reach))
        result: Array = self.mean + q + beyond / (1.0 - probability)
        return result
