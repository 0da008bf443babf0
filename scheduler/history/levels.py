"""Energy levels from daily returns: maximum likelihood of the Poisson mixture, and how sure it is.

Intervals are of the profile likelihood, widened where the returns are less informative than
independent ones would be: the limit of twice the drop in log likelihood, 3.84, is multiplied by the
ratio of the parameter's variance by the sandwich formula (scores added up by session,
autocovariances after Newey & West 1987) to the one by the curvature alone, if that is above 1.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from scipy.special import ndtr

from scheduler.history.regression import long_run
from scheduler.model.levels import log_likelihood
from scheduler.model.ragged import Array, Index

THEORY = 0.25
"""nu of Orrell (2020)."""
FEWEST = 250
"""Returns below which nothing is fitted: the rate could be anything (our choice, a year)."""
MOST = 20_000
"""Returns used at most: more would narrow no interval that their dependence leaves wide."""

_LOWEST, _HIGHEST = 1e-4, 1.0  # beyond, the mixture tends to the normal law again, as at 0
_STARTS = (0.03, 0.25, 0.7)
_LIMIT = 3.841458820694124  # 95 % of chi-squared with one degree of freedom


@dataclass(frozen=True)
class Levels:
    """What returns say of the mixture.

    mean, ground_vol, level_rate : estimates; a rate of 0 is the normal law, and none is above 1.
    level_rate_interval, ground_vol_interval : 95 %. theory_p : of nu = 1/4 against any other.
    normal_p : of the normal law, 1/2 chi^2_0 + 1/2 chi^2_1, as nu = 0 is on the boundary.
    dependence : factors of the variances of log nu and log sigma_0 that the intervals allow for.
    """

    returns: int
    mean: float
    ground_vol: float
    level_rate: float
    level_rate_interval: tuple[float, float]
    ground_vol_interval: tuple[float, float]
    log_likelihood: float
    normal_log_likelihood: float
    theory_p: float
    normal_p: float
    dependence: tuple[float, float]

    @property
    def normal_statistic(self) -> float:
        """Twice the log of the likelihood ratio to the normal law."""
        return max(0.0, 2.0 * (self.log_likelihood - self.normal_log_likelihood))

    def as_dict(self) -> dict[str, Any]:
        return {
            name: list(value) if isinstance(value, tuple) else value
            for name, value in vars(self).items()
        }


def fit_levels(returns: Array, session: Index | None = None) -> Levels:
    """Fit (n,) returns; `session` says which belong together, for the errors (default: none do).

    The returns must differ. Estimates scale with them.
    """
    scale = float(returns.std())
    fit = _Fit(returns / scale, np.arange(len(returns)) if session is None else session)
    low, high = fit.rate_interval()
    ground = fit.ground_interval()
    shift = -len(returns) * float(np.log(scale))
    return Levels(
        returns=len(returns),
        mean=fit.mean * scale,
        ground_vol=fit.ground * scale,
        level_rate=fit.rate,
        level_rate_interval=(low, high),
        ground_vol_interval=(ground[0] * scale, ground[1] * scale),
        log_likelihood=fit.best + shift,
        normal_log_likelihood=fit.normal + shift,
        theory_p=_upper_tail((fit.best - fit.profile(THEORY)) * 2.0 / fit.dependence[0]),
        normal_p=normal_p(2.0 * (fit.best - fit.normal)),
        dependence=fit.dependence,
    )


def pooled_levels(returns: Sequence[Array], sessions: Sequence[Index]) -> Levels | None:
    """Levels of several symbols' returns, each in units of its own root mean square.

    The mean and sigma_0 are in those units, too. None where there are too few returns; of very many
    every so-many-th symbol is used.
    """
    total = sum(len(each) for each in returns)
    step = max(1, -(-total // MOST))
    chosen = [
        (each / np.sqrt(np.mean(each**2)), session)
        for each, session in zip(returns[::step], sessions[::step], strict=True)
        if len(each) and (each != 0.0).any()
    ]
    if sum(len(each) for each, _ in chosen) < FEWEST:
        return None
    every, session = (np.concatenate(part) for part in zip(*chosen, strict=True))
    return fit_levels(every, session)


def normal_p(statistic: float) -> float:
    """P of a larger likelihood ratio statistic under the normal law, 1/2 chi^2_0 + 1/2 chi^2_1."""
    return 0.5 * _upper_tail(statistic) if statistic > 0.0 else 1.0


def bootstrap_normal_p(fitted: Levels, *, draws: int = 199, seed: int = 1) -> float:
    """The same by simulation: part of normal samples of this size with as large a statistic."""
    rng = np.random.default_rng(seed)
    larger = 0
    for _ in range(draws):
        sample = rng.standard_normal(fitted.returns)
        larger += _Fit(sample, np.arange(len(sample))).statistic >= fitted.normal_statistic
    return (1.0 + larger) / (1.0 + draws)


def _upper_tail(statistic: float) -> float:
    """P(chi^2_1 > statistic)."""
    return float(2.0 * ndtr(-np.sqrt(max(statistic, 0.0))))


class _Fit:
    """The fit of returns of unit standard deviation, in (m, log sigma_0, log nu)."""

    def __init__(self, returns: Array, session: Index) -> None:
        self.returns, self.session = returns, session
        variance = float(returns.var())
        count = len(returns)
        self.normal = -0.5 * count * (1.0 + float(np.log(2.0 * np.pi * variance)))
        self.best, self.mean, self.ground, self.rate = self._maximum()
        if self.best <= self.normal + 1e-9 or self.rate <= 2.0 * _LOWEST:
            self.best, self.mean = max(self.best, self.normal), float(returns.mean())
            self.ground, self.rate = float(np.sqrt(variance)), 0.0

    @property
    def statistic(self) -> float:
        return max(0.0, 2.0 * (self.best - self.normal))

    def _maximum(self) -> tuple[float, float, float, float]:
        """Log likelihood, mean, sigma_0 and nu: the best of three starts."""
        from scipy.optimize import minimize  # noqa: PLC0415

        best = (-np.inf, 0.0, 1.0, 0.0)
        for start in _STARTS:
            first = [float(self.returns.mean()), -0.5 * np.log1p(2.0 * start), np.log(start)]
            found = minimize(
                self._minus,
                first,
                jac=True,
                method="L-BFGS-B",
                bounds=[(None, None), (-5.0, 2.0), (np.log(_LOWEST), np.log(_HIGHEST))],
                options={"ftol": 1e-13, "gtol": 1e-7, "maxiter": 500},
            )
            if -found.fun > best[0]:
                mean, ground, rate = found.x
                best = (-float(found.fun), float(mean), float(np.exp(ground)), float(np.exp(rate)))
        return best

    def _minus(self, at: Array) -> tuple[float, Array]:
        value, scores = log_likelihood(
            self.returns, float(at[0]), float(np.exp(at[1])), float(np.exp(at[2]))
        )
        return -value, -scores.sum(axis=0)

    def profile(self, rate: float) -> float:
        """The largest log likelihood at a given nu."""
        return self._held(2, np.log(max(rate, 1e-12)))

    def _held(self, place: int, value: float) -> float:
        """The largest log likelihood with one parameter held."""
        from scipy.optimize import minimize  # noqa: PLC0415

        free = [i for i in range(3) if i != place]
        at = np.array([self.mean, np.log(self.ground), np.log(max(self.rate, _LOWEST))])
        at[place] = value
        if place == 2:  # the variance stays what it is
            at[1] = 0.5 * np.log(1.0 / (1.0 + 2.0 * np.exp(value)))

        def minus(some: Array) -> tuple[float, Array]:
            at[free] = some
            total, slope = self._minus(at)
            return total, slope[free]

        limits = [(None, None), (-5.0, 2.0), (np.log(_LOWEST), np.log(_HIGHEST))]
        found = minimize(
            minus, at[free], jac=True, method="L-BFGS-B", bounds=[limits[i] for i in free]
        )
        return -float(found.fun)

    @cached_property
    def dependence(self) -> tuple[float, float]:
        """Variances of log nu and log sigma_0, sandwich over curvature; at least 1."""
        if self.rate == 0.0:
            return 1.0, 1.0
        at = np.array([self.mean, np.log(self.ground), np.log(self.rate)])
        curvature = np.linalg.pinv(-_jacobian(lambda x: -self._minus(x)[1], at))
        _, scores = log_likelihood(self.returns, self.mean, self.ground, self.rate)
        sandwich = curvature @ long_run(scores, self.session) @ curvature
        ratio = np.diag(sandwich) / np.maximum(np.diag(curvature), 1e-300)
        return max(1.0, float(ratio[2])), max(1.0, float(ratio[1]))

    def rate_interval(self) -> tuple[float, float]:
        """95 % of nu; 0 where the normal law is not excluded."""
        floor = self.best - 0.5 * _LIMIT * self.dependence[0]
        low = 0.0 if self.normal >= floor else self._edge(2, floor, np.log(_LOWEST))
        high = self._edge(2, floor, np.log(_HIGHEST))
        return (0.0 if low == 0.0 else float(np.exp(low))), float(np.exp(high))

    def ground_interval(self) -> tuple[float, float]:
        """95 % of sigma_0."""
        floor = self.best - 0.5 * _LIMIT * self.dependence[1]
        low, high = (float(np.exp(self._edge(1, floor, end))) for end in (-3.0, 1.0))
        return low, high

    def _edge(self, place: int, floor: float, far: float) -> float:
        """Where the profile falls to `floor`, between the estimate and `far`."""
        from scipy.optimize import brentq  # noqa: PLC0415

        at = (0.0, np.log(self.ground), np.log(max(self.rate, _LOWEST)))[place]

        def above(value: float) -> float:
            return self._held(place, value) - floor

        if above(far) >= 0.0:
            return far
        if above(at) <= 0.0:
            return float(at)
        return float(brentq(above, at, far, xtol=1e-4))


def _jacobian(slope: Any, at: Array) -> Array:
    """(3, 3) by central differences."""
    step = 1e-4
    columns = []
    for i in range(len(at)):
        move = np.zeros(len(at))
        move[i] = step
        columns.append((slope(at + move) - slope(at - move)) / (2.0 * step))
    matrix = np.stack(columns, axis=1)
    result: Array = 0.5 * (matrix + matrix.T)
    return result
