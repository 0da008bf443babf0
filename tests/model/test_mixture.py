"""The Poisson mixture of normals: identities, numerical integration and simulation."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import norm, poisson

from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Array


def law(base: Any, own: Any = 0.0, level_rate: float = 0.25, mean: float = 0.0) -> CostDistribution:
    """One order: variances by session."""
    base = np.atleast_1d(np.asarray(base, dtype=float))[:, None]
    own = np.broadcast_to(np.asarray(own, dtype=float), base[:, 0].shape)[:, None]
    return CostDistribution(np.array([mean]), base, own, np.array([level_rate]))


def padded(d: CostDistribution, sessions: int = 20) -> CostDistribution:
    """The same law with idle sessions, so many that the levels are too many to enumerate."""
    idle = np.zeros((sessions, len(d.mean)))
    base, own = np.concatenate((d.base, idle)), np.concatenate((d.own, idle))
    return CostDistribution(d.mean, base, own, d.level_rate)


def one(values: Array) -> float:
    assert values.shape == (1,)
    return float(values[0])


def written_out(cost: float, base: Array, own: Array, level_rate: float, mean: float) -> float:
    """cdf as the double sum over the levels of two sessions."""
    b = base / (1.0 + 2.0 * level_rate)
    n = np.arange(60)
    weight = poisson.pmf(n, level_rate)
    variance = (b + own).sum() + 2.0 * (n[:, None] * b[0] + n * b[1])
    return float((weight[:, None] * weight * norm.cdf((cost - mean) / np.sqrt(variance))).sum())


def test_cdf_is_the_sum_over_levels() -> None:
    """Two sessions written out, levels independent between them."""
    base, own = np.array([4.0, 1.0]), np.array([0.3, 0.0])
    d = law(base, own, level_rate=0.6, mean=2.0)
    for cost in (-9.0, 0.0, 2.0, 3.5, 12.0):
        expected = written_out(cost, base, own, 0.6, 2.0)
        assert one(d.cdf(np.array([cost]))) == pytest.approx(expected, abs=1e-11)


def test_without_levels_the_law_is_normal() -> None:
    """nu = 0: no energy levels, and the normal's quantile and shortfall."""
    d = law([3.0, 0.5], [0.5, 0.0], level_rate=0.0, mean=1.0)
    assert one(d.cdf(np.array([3.0]))) == pytest.approx(norm.cdf(1.0))
    assert one(d.quantile(0.95)) == pytest.approx(1.0 + 2.0 * norm.ppf(0.95))
    shortfall = 1.0 + 2.0 * norm.pdf(norm.ppf(0.95)) / 0.05
    assert one(d.expected_shortfall(0.95)) == pytest.approx(shortfall)


@pytest.mark.parametrize("level_rate", [0.1, 0.25, 0.5, 3.0, 10.0])
@pytest.mark.parametrize("sessions", [1, 2, 9])
def test_standard_deviation_is_that_of_the_plain_model(level_rate: float, sessions: int) -> None:
    """int x^2 dF = sum base + own: levels fatten the tails and leave the variance alone."""
    d = law(np.linspace(1.0, 2.0, sessions), 0.3, level_rate=level_rate)
    total = np.linspace(1.0, 2.0, sessions).sum() + 0.3 * sessions
    assert one(d.std) ** 2 == pytest.approx(total)
    beyond = lambda x: 4.0 * x * (1.0 - one(d.cdf(np.array([x]))))  # noqa: E731
    second = quad(beyond, 0.0, 15.0 * np.sqrt(total), epsrel=1e-8, limit=100)[0]
    assert second == pytest.approx(total, rel=1e-6)


@given(
    st.floats(0.0, 10.0),
    st.lists(st.tuples(st.floats(0.0, 10.0), st.floats(0.0, 3.0)), min_size=1, max_size=3),
    st.floats(0.002, 0.998),
)
@settings(max_examples=40, deadline=None)
def test_quantile_inverts_the_cdf(
    level_rate: float, variances: list[tuple[float, float]], probability: float
) -> None:
    base, own = np.array(variances).T
    d = law(base + 1e-6, own, level_rate=level_rate, mean=-3.0)
    assert one(d.cdf(d.quantile(probability))) == pytest.approx(probability, abs=1e-9)


@pytest.mark.parametrize("many", [False, True])
@pytest.mark.parametrize("probability", [0.5, 0.9, 0.95, 0.999])
def test_expected_shortfall_is_the_mean_of_the_quantiles_beyond(
    probability: float, many: bool
) -> None:
    """ES_p = int_p^1 quantile(s) ds / (1 - p) = q + int_q^inf P(X > x) dx / (1 - p)."""
    d = law([2.0, 1.0], 0.2, mean=5.0)
    if many:
        d = padded(d)
    q = one(d.quantile(probability))
    beyond = lambda x: 1.0 - one(d.cdf(np.array([x])))  # noqa: E731
    tail = quad(beyond, q, q + 30.0 * one(d.std), epsabs=1e-13, epsrel=1e-9, limit=200)[0]
    expected = q + tail / (1.0 - probability)
    assert one(d.expected_shortfall(probability)) == pytest.approx(expected, rel=1e-6)


def test_quantile_and_shortfall_agree_with_simulation() -> None:
    """A million draws of levels and normals; five standard errors."""
    rng, count, probability = np.random.default_rng(7), 1_000_000, 0.95
    base, own, rate = np.array([1.5, 3.0, 0.6]), np.array([0.2, 0.0, 0.1]), 0.25
    levels = rng.poisson(rate, (count, 3))
    variance = (base / (1.0 + 2.0 * rate) * (1.0 + 2.0 * levels) + own).sum(axis=1)
    cost = 10.0 + np.sqrt(variance) * rng.standard_normal(count)
    d = law(base, own, level_rate=rate, mean=10.0)
    q = d.quantile(probability)
    share = (cost > q).mean()
    assert share == pytest.approx(0.05, abs=5.0 * np.sqrt(0.05 * 0.95 / count))
    tail = cost[cost > q]
    error = tail.std() / np.sqrt(len(tail))
    assert one(d.expected_shortfall(probability)) == pytest.approx(tail.mean(), abs=6.0 * error)


@pytest.mark.parametrize("level_rate", [0.0, 0.05, 0.25, 2.0, 10.0])
def test_many_sessions_give_the_same_law_as_the_sum_over_levels(level_rate: float) -> None:
    """Idle sessions force the inversion of the characteristic function and change nothing."""
    few = law([2.0], [0.1], level_rate=level_rate, mean=1.0)
    many = padded(few)
    for cost in (-9.0, -1.0, 1.0, 2.0, 5.0, 12.0):
        at = np.array([cost])
        assert one(many.cdf(at)) == pytest.approx(one(few.cdf(at)), abs=1e-9)
    for p in (0.01, 0.9, 0.999):
        assert one(many.quantile(p)) == pytest.approx(one(few.quantile(p)), abs=1e-6)
        expected = one(few.expected_shortfall(p))
        assert one(many.expected_shortfall(p)) == pytest.approx(expected, abs=1e-5)


def test_levels_average_out_over_many_sessions() -> None:
    """Kurtosis falls towards 3, so the far quantile falls towards the normal's."""
    far = [one(law(np.full(n, 1.0 / n)).quantile(0.999)) for n in (1, 3, 30, 300)]
    assert far == sorted(far, reverse=True)
    assert far[0] > 3.5
    assert far[-1] == pytest.approx(norm.ppf(0.999), rel=2e-3)


@pytest.mark.parametrize("sessions", [1, 40])
def test_without_variance_the_cost_is_certain(sessions: int) -> None:
    """An order only in an auction: the quantile and the shortfall are the mean."""
    d = law(np.zeros(sessions), mean=123.0)
    assert one(d.std) == 0.0
    assert one(d.quantile(0.95)) == 123.0
    assert one(d.expected_shortfall(0.95)) == 123.0
    assert one(d.cdf(np.array([122.99]))) == 0.0
    assert one(d.cdf(np.array([123.0]))) == 1.0


def test_orders_of_one_distribution_do_not_touch() -> None:
    """Each of a batch, the certain one among them, has the law it has alone."""
    alone = [law([1.0, 2.0], 0.1, 0.25, 4.0), law([0.0, 0.0], 0.0, 2.0, 7.0), law([5.0, 0.1])]
    alone.append(law([1.0, 2.0], level_rate=0.0))
    batch = CostDistribution(
        np.concatenate([d.mean for d in alone]),
        np.concatenate([d.base for d in alone], axis=1),
        np.concatenate([d.own for d in alone], axis=1),
        np.concatenate([d.level_rate for d in alone]),
    )
    for p in (0.2, 0.95):
        quantiles = [one(d.quantile(p)) for d in alone]
        assert batch.quantile(p) == pytest.approx(quantiles, abs=1e-9)
        shortfalls = [one(d.expected_shortfall(p)) for d in alone]
        assert batch.expected_shortfall(p) == pytest.approx(shortfalls, abs=1e-9)


def test_law_is_symmetric_and_shifts_with_the_mean() -> None:
    d, moved = law([2.0, 0.4], 0.3), law([2.0, 0.4], 0.3, mean=50.0)
    assert one(d.quantile(0.05)) == pytest.approx(-one(d.quantile(0.95)))
    assert one(moved.quantile(0.9)) == pytest.approx(50.0 + one(d.quantile(0.9)))
    assert one(moved.expected_shortfall(0.9)) == pytest.approx(
        50.0 + one(d.expected_shortfall(0.9))
    )
