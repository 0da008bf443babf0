"""The impact law from own fills: coefficient k, exponent delta and relaxation r.

Over orders i = 1 ... N the slippage y_i, in daily volatilities (`scheduler.history.executed`), is
fitted by k f_i(delta, r), f_i the model's own impact cost at k = 1, in theta = (log k, delta,
log r):

    minimise sum_i rho((y_i - k f_i)^2 / s_i^2),   rho soft_l1,

s_i the model's standard deviation of the order's cost times one factor common to all, from the
median absolute residual. Intervals are those of 199 fits to days drawn with replacement, because
orders of one day share its news.

**Are the three told apart?** Large orders say k Q^delta, slow ones r; orders of one size or one
duration leave a direction in theta open. What counts is whether the data say more than the
publications do: with the columns of the Jacobian in units of the published spread, the information
J'J must exceed 1 in every direction, and no interval may be wider than that of the publications. If
it is not so, the fit is drawn towards them by three more residuals, (theta - mean) / sd, and says
so; in the draws their mean is drawn too, so that the intervals keep the publications' own errors.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from scipy.special import fdtri

from scheduler.errors import InputError, Problem
from scheduler.history.executed import Executed
from scheduler.model.ragged import Array, Index

NAMES = ("impact_coefficient", "impact_exponent", "relaxation")
FEWEST_ORDERS = 30
"""Orders below which nothing is fitted (our choice)."""
FEWEST_DAYS = 8
"""Days below which drawing days anew says little of the errors (our choice)."""
DRAWS = 199

OBSERVED = (0.95, 0.25)
"""Constant on observed volatility, mean and relative spread: 0.842 (Sato & Kanazawa 2024/25), of
order 1 (Toth et al. 2011), sqrt(4/3) (Orrell 2020)."""
EXPONENT = (0.53, 0.06)
"""Mean and spread of 0.489 and 0.493 (Sato & Kanazawa 2024/25), 0.5 to 0.6 (Toth et al. 2011),
0.52 and 0.54 (Zarinelli et al. 2015), 0.600 +- 0.038 (Almgren et al. 2005)."""
RELAXATION = (0.1, 1.5)
"""Geometric middle and spread of the logarithm (a quarter of the range): from 0.005, impact of the
rate alone (Almgren et al. 2005), to 2, two thirds left at the day's end (Bucci et al. 2018)."""

_EXPONENTS = (0.1, 1.3)
_RELAXATIONS = (1e-3, 8.0)
_COEFFICIENTS = (1e-3, 1e3)
_NODES = (8, 16)
_SOFT = 1.5  # residuals from which on they count less than their squares


@dataclass(frozen=True)
class Law:
    """The impact law found: arrays (3,) of k, delta, r and (3, 2) of their 95 % intervals.

    free : the fit without publications, with its intervals. identified : whether it is the one
    given; `reasons` says why not. condition : of the Jacobian in units of the published spread.
    information : the least over all directions, in those units. noise : of the slippage, over the
    model's own standard deviation.
    """

    values: Array
    intervals: Array
    free: Array
    free_intervals: Array
    reasons: tuple[str, ...]
    condition: float
    information: float
    noise: float
    orders: int
    days: int
    draws: Array  # (DRAWS, 3) of theta

    @property
    def identified(self) -> bool:
        return not self.reasons

    def excludes(self, values: Array) -> bool:
        """Whether k, delta, r are outside the joint 95 % region.

        Wald's, with the covariance of the draws and, as that is known from few days, Hotelling's
        limit in place of chi-squared's.
        """
        off = _theta(self.values) - _theta(values)
        statistic = off @ np.linalg.pinv(np.cov(self.draws.T)) @ off
        free = self.days - 3
        limit = 3.0 * (self.days - 1) / free * fdtri(3, free, 0.95)
        return bool(statistic > limit)

    def as_dict(self) -> dict[str, Any]:
        def named(values: Array, intervals: Array) -> dict[str, Any]:
            return {
                name: {"value": value, "interval": interval}
                for name, value, interval in zip(
                    NAMES, values.tolist(), intervals.tolist(), strict=True
                )
            }

        return {
            "orders": self.orders,
            "days": self.days,
            "noise": self.noise,
            "identified": self.identified,
            "not_identified_because": list(self.reasons),
            "condition": self.condition,
            "least_information": self.information,
            "drawn_to_publications": not self.identified,
            **named(self.values, self.intervals),
            "without_publications": named(self.free, self.free_intervals),
        }


def fit_law(past: Executed, source: str, *, seed: int = 1) -> Law:
    """Fit the law to executed orders.

    Raises:
        InputError: too few orders or days. `source` names their table.
    """
    days = np.unique(past.day)
    if len(past) < FEWEST_ORDERS or len(days) < FEWEST_DAYS:
        rule = f"has fills of {len(past)} orders on {len(days)} days"
        remedy = f"an impact law needs {FEWEST_ORDERS} orders on {FEWEST_DAYS} days, or more"
        raise InputError([Problem(source, None, None, None, rule, remedy)])
    fit = _Fit(past)
    everything = np.arange(len(past))
    free = fit.solve(everything, fit.start)
    draws = np.array([fit.solve(rows, free) for rows in _drawn(past.day, seed)])
    information = fit.information(free)
    reasons = tuple(_unclear(information, draws))
    best, final = free, draws
    if reasons:
        best, final = _drawn_to_publications(fit, past.day, seed)
    least, most = float(information[0]), float(information[-1])
    return Law(
        values=_values(best),
        intervals=_intervals(final),
        free=_values(free),
        free_intervals=_intervals(draws),
        reasons=reasons,
        condition=float(np.sqrt(most / least)) if least > 0.0 else np.inf,
        information=least,
        noise=fit.noise,
        orders=len(past),
        days=len(days),
        draws=final,
    )


def _drawn_to_publications(fit: _Fit, day: Index, seed: int) -> tuple[Array, Array]:
    best = fit.solve(np.arange(len(day)), fit.published, fit.published)
    rng = np.random.default_rng(seed)
    means = fit.published + fit.spread * rng.standard_normal((DRAWS, 3))
    pairs = zip(_drawn(day, seed), means, strict=True)
    return best, np.array([fit.solve(rows, best, mean) for rows, mean in pairs])


def _unclear(information: Array, draws: Array) -> Iterator[str]:
    """Why coefficient, exponent and relaxation cannot be told apart by the data."""
    if information[0] < 1.0:
        yield (
            "in one direction the orders say less than the publications do "
            f"({max(information[0], 0.0):.2g} of their information)"
        )
    low, high = np.quantile(draws, (0.025, 0.975), axis=0)
    # 95 % of the published spread
    published = 2.0 * 1.96 * np.array([OBSERVED[1], EXPONENT[1], RELAXATION[1]])
    for name, width, known in zip(NAMES, high - low, published, strict=True):
        if width > known:
            yield f"the interval of {name} is wider than that of the publications"


def _drawn(day: Index, seed: int) -> Iterator[Index]:
    """Orders of as many days as there are, drawn with replacement."""
    rng = np.random.default_rng(seed)
    place = np.unique(day, return_inverse=True)[1]
    order = np.argsort(place, kind="stable")
    groups = np.split(order, np.cumsum(np.bincount(place))[:-1])
    for _ in range(DRAWS):
        yield np.concatenate([groups[i] for i in rng.integers(0, len(groups), len(groups))])


def _theta(values: Array) -> Array:
    return np.array([np.log(values[0]), values[1], np.log(values[2])])


def _values(theta: Array) -> Array:
    """k, delta, r of theta (..., 3)."""
    return np.stack((np.exp(theta[..., 0]), theta[..., 1], np.exp(theta[..., 2])), axis=-1)


def _intervals(draws: Array) -> Array:
    result: Array = np.quantile(_values(draws), (0.025, 0.975), axis=0).T
    return result


class _Fit:
    """The fit to N orders. published, spread : mean and sd of theta in the publications."""

    def __init__(self, past: Executed) -> None:
        self.past = past
        observed = np.sqrt(1.0 + 2.0 * float(past.market.level_rate[0]))
        self.published = _theta(np.array([OBSERVED[0] * observed, EXPONENT[0], RELAXATION[0]]))
        self.spread = np.array([OBSERVED[1], EXPONENT[1], RELAXATION[1]])
        ends = (_COEFFICIENTS, _EXPONENTS, _RELAXATIONS)
        self.bounds = tuple(_theta(np.array([pair[i] for pair in ends])) for i in (0, 1))
        error = past.error
        self.error = np.maximum(error, 0.1 * float(np.median(error)))
        self.noise = 1.0
        self.start = self.solve(np.arange(len(past)), self.published)
        off = self.residuals(np.arange(len(past)), self.start)[0]
        self.noise = max(1.4826 * float(np.median(np.abs(off))), 1e-6)
        self.start = self.solve(np.arange(len(past)), self.start)

    @cached_property
    def surface(self) -> Surface:
        return Surface(self.past)

    def residuals(self, rows: Index, theta: Array) -> tuple[Array, Array]:
        """(n,) residuals over their standard deviation, and (n, 3) their slopes."""
        value, by_exponent, by_relaxation = self.surface.at(float(theta[1]), float(theta[2]))
        predicted = np.exp(theta[0] + value[rows])
        scale = 1.0 / (self.noise * self.error[rows])
        slopes = np.column_stack((np.ones(len(rows)), by_exponent[rows], by_relaxation[rows]))
        off = (self.past.slippage[rows] - predicted) * scale
        return off, -slopes * (predicted * scale)[:, None]

    def solve(self, rows: Index, start: Array, mean: Array | None = None) -> Array:
        """The best theta for some orders; with `mean`, drawn towards it by the published spread."""
        from scipy.optimize import least_squares  # noqa: PLC0415

        drawn = np.diag(1.0 / self.spread)

        def values(theta: Array) -> Array:
            off = self.residuals(rows, theta)[0]
            return off if mean is None else np.append(off, drawn @ (theta - mean))

        def slopes(theta: Array) -> Array:
            jacobian = self.residuals(rows, theta)[1]
            return jacobian if mean is None else np.vstack((jacobian, drawn))

        low, high = self.bounds
        inside = np.clip(start, low + 1e-6, high - 1e-6)
        found = least_squares(
            values,
            inside,
            jac=slopes,
            bounds=(low, high),
            loss=lambda square: _soft(square, len(rows)),
            f_scale=_SOFT,
            x_scale=self.spread,
            xtol=1e-6,
            ftol=1e-8,
            gtol=1e-6,
        )
        result: Array = found.x
        return result

    def information(self, theta: Array) -> Array:
        """Eigenvalues of J'J, ascending, with theta in units of the published spread, (3,)."""
        slopes = self.residuals(np.arange(len(self.past)), theta)[1] * self.spread
        result: Array = np.linalg.eigvalsh(slopes.T @ slopes)
        return result


def _soft(square: Array, count: int) -> Array:
    """soft_l1 and its two derivatives for the first `count` squares, the others as they are."""
    root = np.sqrt(1.0 + square)
    result = np.stack((2.0 * (root - 1.0), 1.0 / root, -0.5 / root**3))
    result[0, count:], result[1, count:], result[2, count:] = square[count:], 1.0, 0.0
    return result


class Surface:
    """log f_i(delta, log r) by interpolation between Chebyshev points, with its slopes.

    The model is asked once for every pair of points; a smooth function of both is then known to
    about 1e-5 of its value, at the price of a small matrix product.
    """

    def __init__(self, past: Executed) -> None:
        self.exponents = _Points(*_EXPONENTS, count=_NODES[0])
        low, high = np.log(_RELAXATIONS).tolist()
        self.relaxations = _Points(low, high, _NODES[1])
        self.table = np.log(
            [
                [past.predicted(float(d), float(np.exp(r))) for r in self.relaxations.points]
                for d in self.exponents.points
            ]
        )

    def at(self, exponent: float, log_relaxation: float) -> tuple[Array, Array, Array]:
        """(N,) values, slopes along delta, and slopes along log r."""
        w, dw = self.exponents.weights(exponent)
        u, du = self.relaxations.weights(log_relaxation)
        along = np.tensordot(np.stack((w, dw)), self.table, axes=1)  # (2, relaxations, N)
        return u @ along[0], u @ along[1], du @ along[0]


class _Points:
    """Chebyshev points on [low, high]; polynomials through them by their coefficients."""

    def __init__(self, low: float, high: float, count: int) -> None:
        cheb = np.polynomial.chebyshev
        at = cheb.chebpts1(count)
        self.low, self.high = low, high
        self.points: Array = 0.5 * (low + high) + 0.5 * (high - low) * at
        self.inverse = np.linalg.inv(cheb.chebvander(at, count - 1))
        self.slope = cheb.chebder(np.eye(count))  # coefficients of the derivatives

    def weights(self, value: float) -> tuple[Array, Array]:
        """Weights of the points for the value there, and for the slope."""
        x = (2.0 * value - self.low - self.high) / (self.high - self.low)
        terms = np.cos(np.arange(len(self.points)) * np.arccos(np.clip(x, -1.0, 1.0)))
        steep = terms[:-1] @ self.slope * (2.0 / (self.high - self.low))
        return terms @ self.inverse, steep @ self.inverse
