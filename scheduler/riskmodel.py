"""A factor model of risk: the daily covariance of a list, Sigma = B F B' + diag(psi).

From tables of exposures and of factor covariance, or estimated from a history of returns. In both
cases the diagonal is the market table's, psi_i = vol_i^2 - (B F B')_ii, so that a name's own risk
is the same whether it is planned alone or in a list.
"""

from __future__ import annotations

import datetime
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import InputError, MissingExtraError, MisuseError
from scheduler.model.ragged import Array
from scheduler.tables.cross_list import (
    claim_problems,
    factor_problems,
    factor_variance,
    symbol_problems,
)
from scheduler.tables.draft import Checked, some
from scheduler.tables.exposures import exposure_matrix, factor_names
from scheduler.tables.factor_covariance import covariance_matrix
from scheduler.tables.returns import common_history, returns_problems

SPECIFIC_FLOOR = 1e-4
"""Least share of a name's variance that stays its own (our choice): 1 % of its volatility. No two
names are then taken for the same, and every name's risk has curvature of its own."""
MOST_FACTORS = 30
"""Most factors that are taken from a history without being asked for (our choice)."""
STALE_DAYS = 10
"""Calendar days after which a history of returns is called old (our choice)."""
_NULL = 1e-13
"""Eigenvalues over the largest one below which they are 0 but for rounding."""


@dataclass(frozen=True, eq=False)
class RiskModel:
    """Daily covariance B F B' + diag(psi) of N names by K factors, fractions of price.

    factors : names of the K factors. exposures : (N, K) B, rows in the order of the symbols asked
    for. covariance : (K, K) F, per day. specific : (N,) psi, per day, above 0.
    """

    factors: tuple[str, ...]
    exposures: Array
    covariance: Array
    specific: Array

    def orthonormal(self) -> Array:
        """(N, J) L with L L' = B F B', J <= K the rank of F: exposures to uncorrelated factors.

        With F = D U diag(w) U' D, D the factors' standard deviations, it is L = B D U sqrt(w); null
        directions are left out, so that F may be singular.
        """
        deviation = np.sqrt(np.maximum(np.diag(self.covariance), 0.0))
        unit = np.where(deviation > 0.0, deviation, 1.0)
        values, vectors = np.linalg.eigh(self.covariance / np.outer(unit, unit))
        kept = values > _NULL * max(values[-1], 0.0)
        result: Array = (self.exposures * unit) @ (vectors[:, kept] * np.sqrt(values[kept]))
        return result


def from_exposures(
    exposures: Checked, covariance: Checked, symbols: Sequence[str], vol: Array
) -> tuple[RiskModel, tuple[str, ...]]:
    """The model of two checked tables, and notes.

    Where the factors claim more of a name's variance than 1 - SPECIFIC_FLOOR, by up to
    MOST_CLAIMED in volatility, the name's exposures are scaled down until they claim just that.

    Parameters
    ----------
    symbols : N names. vol : (N,) their volatility, fraction per square root of a day.

    Raises:
        InputError: factors of one table that the other lacks, symbols without exposures, or
            factors that claim far more than a name's volatility.
    """
    problems = [*factor_problems(exposures, covariance), *symbol_problems(exposures, symbols)]
    problems = problems or claim_problems(exposures, covariance, symbols, vol)
    if problems:
        raise InputError(problems)
    factors = factor_names(exposures)
    model, scaled = _reconciled(
        factors,
        exposure_matrix(exposures, symbols, factors),
        covariance_matrix(covariance, factors),
        vol,
    )
    names = [symbols[at] for at in np.flatnonzero(scaled).tolist()]
    text = "exposures scaled down, factors claiming all of the variance that the market table gives"
    return model, (f"{exposures.source}: {text}, for {some(names)}",) if names else ()


def from_returns(
    returns: Checked,
    symbols: Sequence[str],
    vol: Array,
    *,
    factors: int | None = None,
    date: datetime.date | None = None,
) -> tuple[RiskModel, tuple[str, ...]]:
    """A model with K statistical factors, estimated from a history, and notes.

    The returns, each symbol's brought to mean 0 and variance 1, have the sample correlation
    S = V diag(l) V'. Shrinking it linearly towards the identity gives C = (1 - a) S + a I, a by
    Ledoit & Wolf (2004), *J. Multivariate Anal.* 88, 365-411; scaling first keeps the diagonal at 1
    and the result the same whatever a symbol's units. The factors are the K directions of the
    largest l, F = (1 - a) diag(l), B_i = vol_i V_i; what is left of the diagonal, a and the
    directions left out, is specific. With all directions B F B' + diag(psi) is C, scaled to the
    market table's volatilities.

    Parameters
    ----------
    symbols : N names. vol : (N,) their volatility, fraction per square root of a day.
    factors : K; by default the number of l above `noise_edge`, at least 1, at most MOST_FACTORS.
    date : the day planned for; a history that ends long before it is noted.

    Raises:
        InputError: symbols without returns, or with too few in common.
        MisuseError: more factors than the history can tell apart.
        MissingExtraError: scikit-learn is not installed.
    """
    problems = returns_problems(returns, symbols)
    if problems:
        raise InputError(problems)
    sample, dates, notes = common_history(returns, symbols)
    scaled = (sample - sample.mean(axis=0)) / sample.std(axis=0)
    sizes, directions = _directions(scaled)
    count = _factor_count(sizes, scaled.shape, factors)
    shrinkage = _shrinkage(scaled)
    names = [f"statistical-{at + 1}" for at in range(count)]
    covariance = np.diag((1.0 - shrinkage) * sizes[:count])
    model, _ = _reconciled(names, vol[:, None] * directions[:, :count], covariance, vol)
    how = f"{count} statistical factors from {len(dates)} days, shrinkage {shrinkage:.2g}"
    return model, (*notes, f"{returns.source}: {how}", *_stale(returns, dates[-1], date))


def noise_edge(names: int, days: int) -> float:
    """The largest eigenvalue that the correlation of unrelated returns has, (1 + sqrt(N/T))^2.

    Marchenko & Pastur (1967), *Math. USSR-Sbornik* 1, 457-483, in the limit of many names and
    days. Eigenvalues above it are taken for common movement: Laloux, Cizeau, Bouchaud & Potters
    (1999), *Phys. Rev. Lett.* 83, 1467-1470.
    """
    return float((1.0 + np.sqrt(names / days)) ** 2)


def _directions(scaled: Array) -> tuple[Array, Array]:
    """Eigenvalues of the correlation, largest first, and its eigenvectors as columns, (N, .).

    By way of the days' products where there are fewer days than names.
    """
    days, names = scaled.shape
    if names <= days:
        values, vectors = np.linalg.eigh(scaled.T @ scaled / days)
    else:
        values, by_day = np.linalg.eigh(scaled @ scaled.T / days)
        vectors = scaled.T @ by_day
        vectors /= np.maximum(np.linalg.norm(vectors, axis=0), np.finfo(float).tiny)
    return np.maximum(values[::-1], 0.0), vectors[:, ::-1]


def _factor_count(sizes: Array, shape: tuple[int, ...], asked: int | None) -> int:
    days, names = shape
    most = min(names, days - 1)
    if asked is not None:
        if not 1 <= asked <= most:
            raise MisuseError(f"factors must be from 1 to {most} for {names} names and {days} days")
        return asked
    above = int((sizes > noise_edge(names, days)).sum())
    return min(max(above, 1), MOST_FACTORS)


def _shrinkage(scaled: Array) -> float:
    """Ledoit and Wolf's a of returns with mean 0.

    Raises:
        MissingExtraError: scikit-learn is not installed.
    """
    try:
        from sklearn.covariance import ledoit_wolf_shrinkage  # noqa: PLC0415
    except ModuleNotFoundError as error:
        raise MissingExtraError(
            "a covariance from returns needs scikit-learn, which is not installed; "
            "pip install 'headrace[risk]', or give exposures and factor_covariance"
        ) from error
    return float(ledoit_wolf_shrinkage(scaled, assume_centered=True))


def _reconciled(
    factors: Sequence[str], exposures: Array, covariance: Array, vol: Array
) -> tuple[RiskModel, NDArray[np.bool_]]:
    """The model with the given diagonal, and (N,) whether a name's exposures were scaled down."""
    variance = np.square(vol)
    claimed = factor_variance(exposures, covariance)
    over = claimed > (1.0 - SPECIFIC_FLOOR) * variance
    ratio = (1.0 - SPECIFIC_FLOOR) * variance / np.where(over, claimed, 1.0)
    scale = np.where(over, np.sqrt(ratio), 1.0)
    specific = np.where(over, SPECIFIC_FLOOR * variance, variance - claimed)
    return RiskModel(tuple(factors), scale[:, None] * exposures, covariance, specific), over


def _stale(returns: Checked, last: str, date: datetime.date | None) -> tuple[str, ...]:
    if date is None:
        return ()
    age = (date - datetime.date.fromisoformat(last)).days
    if age <= STALE_DAYS:
        return ()
    return (f"{returns.source}: the last return is of {last}, {age} days before {date}",)
