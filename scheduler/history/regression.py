"""Least squares whose errors may be of unequal size and depend on each other for a while.

The covariance of the coefficients is the sandwich formula with autocovariances after Newey & West
(1987, Econometrica 55, 703-708): scores are added up by group, groups are in time order, and the
Bartlett weights reach over 4 (G/100)^(2/9) of G groups.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import ndtr

from scheduler.model.ragged import Array, Index

NORMAL_95 = 1.959963984540054
"""Half the length of a 95 % interval of a normal law, standard deviations."""


@dataclass(frozen=True)
class Slope:
    """One coefficient: value, standard error, observations."""

    value: float
    error: float
    observations: int

    @property
    def interval(self) -> tuple[float, float]:
        """95 %."""
        half = NORMAL_95 * self.error
        return self.value - half, self.value + half

    @property
    def p(self) -> float:
        """Chance of a value as far from 0, if 0 were true."""
        return float(2.0 * ndtr(-abs(self.value) / self.error))

    def as_dict(self) -> dict[str, Any]:
        return {
            "value": self.value,
            "interval": list(self.interval),
            "p": self.p,
            "observations": self.observations,
        }


def least_squares(y: Array, columns: list[Array], group: Index, *, lost: int = 0) -> list[Slope]:
    """Slopes of y (n,) on columns (n,) each; an intercept has to be one of them.

    group : (n,) which errors are of one time; numbers in time order. lost : degrees of freedom
    that earlier steps have used up.
    """
    X = np.column_stack(columns)
    inverse = np.linalg.pinv(X.T @ X)
    slopes = inverse @ (X.T @ y)
    scores = X * (y - X @ slopes)[:, None]
    count = len(y)
    factor = count / max(count - X.shape[1] - lost, 1)
    covariance = factor * inverse @ long_run(scores, group) @ inverse
    errors = np.sqrt(np.diag(covariance))
    return [Slope(float(b), float(e), count) for b, e in zip(slopes, errors, strict=True)]


def long_run(scores: Array, group: Index) -> Array:
    """Variance of the sum of (n, p) scores: added up by group, Bartlett weights over groups."""
    place = np.unique(group, return_inverse=True)[1]
    by_group = np.zeros((int(place.max()) + 1, scores.shape[1]))
    np.add.at(by_group, place, scores)
    count = len(by_group)
    lags = int(4.0 * (count / 100.0) ** (2.0 / 9.0))
    total = by_group.T @ by_group
    for lag in range(1, lags + 1):
        part = by_group[lag:].T @ by_group[:-lag]
        total += (1.0 - lag / (lags + 1.0)) * (part + part.T)
    result: Array = total
    return result
