"""Energy levels from returns: known truth, other libraries, and what real returns say."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from scheduler.history.levels import bootstrap_normal_p, fit_levels, normal_p
from scheduler.model.levels import log_likelihood, log_weights

TRUTH = {"mean": 3e-4, "ground_vol": 0.012, "level_rate": 0.25}


def simulated(seed: int, count: int = 750, level_rate: float = 0.25) -> np.ndarray:
    """Daily returns of the model."""
    rng = np.random.default_rng(seed)
    levels = rng.poisson(level_rate, count)
    spread = TRUTH["ground_vol"] * np.sqrt(1.0 + 2.0 * levels)
    return TRUTH["mean"] + spread * rng.standard_normal(count)


@pytest.fixture(scope="module")
def index() -> np.ndarray:
    """Daily log returns of the S&P 500, 1999 to 2018 (carried by the package arch)."""
    from arch.data import sp500

    return np.diff(np.log(sp500.load()["Adj Close"].to_numpy(dtype=float)))


def by_scipy(returns: np.ndarray, mean: float, ground_vol: float, level_rate: float) -> float:
    """The log likelihood from scipy's Poisson and normal laws."""
    count = np.arange(60)
    spread = ground_vol * np.sqrt(1.0 + 2.0 * count)
    density = stats.norm.pdf(returns[:, None], mean, spread) @ stats.poisson.pmf(count, level_rate)
    return float(np.log(density).sum())


@pytest.mark.parametrize("level_rate", [1e-3, 0.25, 1.0])
def test_the_likelihood_is_that_of_a_poisson_mixture(level_rate: float) -> None:
    returns = simulated(1)
    ours, _ = log_likelihood(returns, 1e-4, 0.011, level_rate)
    assert ours == pytest.approx(by_scipy(returns, 1e-4, 0.011, level_rate), rel=1e-10)
    assert np.exp(log_weights(level_rate)).sum() == pytest.approx(1.0, abs=1e-11)


def test_scores_are_slopes_of_the_likelihood() -> None:
    """Central differences in each parameter."""
    returns, at = simulated(2), np.array([2e-4, np.log(0.011), np.log(0.3)])
    _, scores = log_likelihood(returns, at[0], np.exp(at[1]), np.exp(at[2]))
    for i, step in enumerate((1e-7, 1e-5, 1e-5)):
        move = np.zeros(3)
        move[i] = step
        up, down = (
            log_likelihood(returns, x[0], np.exp(x[1]), np.exp(x[2]))[0]
            for x in (at + move, at - move)
        )
        assert scores[:, i].sum() == pytest.approx((up - down) / (2.0 * step), rel=1e-4)


def test_an_independent_fit_finds_the_same(index: np.ndarray) -> None:
    """scipy's simplex search of scipy's density, on real index returns."""
    from scipy.optimize import minimize

    percent = 100.0 * index
    ours = fit_levels(percent)
    theirs = minimize(
        lambda at: -by_scipy(percent, at[0], np.exp(at[1]), np.exp(at[2])),
        [0.0, 0.0, -0.5],
        method="Nelder-Mead",
        bounds=[(None, None), (None, None), (None, 0.0)],
        options={"xatol": 1e-6, "fatol": 1e-8},
    )
    assert ours.log_likelihood == pytest.approx(-theirs.fun, abs=1e-4)
    assert ours.mean == pytest.approx(theirs.x[0], abs=1e-3)
    assert ours.ground_vol == pytest.approx(np.exp(theirs.x[1]), rel=1e-3)
    assert ours.level_rate == pytest.approx(np.exp(theirs.x[2]), rel=2e-3)


def test_real_index_returns_are_no_normal_law_and_a_student_law_fits_better(
    index: np.ndarray,
) -> None:
    """What the mixture is good for and where it falls short, by likelihood."""
    ours = fit_levels(index)
    assert ours.normal_p < 1e-100
    student = stats.t.logpdf(index, *stats.t.fit(index)).sum()
    assert ours.normal_log_likelihood < ours.log_likelihood < student
    assert ours.normal_log_likelihood == pytest.approx(
        stats.norm.logpdf(index, *stats.norm.fit(index)).sum(), rel=1e-12
    )
    assert ours.dependence[1] > 1.5  # calm and stormy days come together


def _covered(seeds: range) -> dict[str, float]:
    found = {"level_rate": 0, "ground_vol": 0}
    for seed in seeds:
        fitted = fit_levels(simulated(seed))
        for name in found:
            low, high = getattr(fitted, f"{name}_interval")
            found[name] += low <= TRUTH[name] <= high
    return {name: count / len(seeds) for name, count in found.items()}


def test_intervals_cover_the_truth() -> None:
    """95 % intervals in 40 samples of 750 days: fewer than 83 % would be one chance in 1,000."""
    for share in _covered(range(40)).values():
        assert share >= 0.83


@pytest.mark.slow
def test_intervals_cover_the_truth_as_often_as_they_say() -> None:
    for share in _covered(range(1000, 1200)).values():
        assert 0.91 <= share <= 0.98


def test_normal_returns_are_taken_for_normal() -> None:
    """The chance of a false alarm is what it should be; the bootstrap agrees with the theory."""
    rng = np.random.default_rng(3)
    chances = [fit_levels(rng.standard_normal(400)).normal_p for _ in range(40)]
    assert np.mean(np.array(chances) < 0.05) <= 0.175
    assert np.mean(np.array(chances) == 1.0) >= 0.25  # half of them in theory, on the boundary
    fitted = fit_levels(simulated(5, 300))
    assert fitted.normal_p < 0.05
    assert bootstrap_normal_p(fitted, draws=39) <= 0.1


def test_the_law_of_the_ratio_has_half_its_mass_at_nought() -> None:
    assert normal_p(0.0) == 1.0
    assert normal_p(2.705543) == pytest.approx(0.05, rel=1e-5)  # 90 % of chi-squared, tables
    assert normal_p(1e-12) == pytest.approx(0.5, abs=1e-5)


@pytest.mark.parametrize("factor", [1e-3, 100.0])
def test_the_unit_of_returns_does_not_matter(factor: float) -> None:
    plain, scaled = (fit_levels(simulated(7) * f) for f in (1.0, factor))
    assert scaled.level_rate == pytest.approx(plain.level_rate, rel=1e-6)
    assert scaled.ground_vol == pytest.approx(factor * plain.ground_vol, rel=1e-6)
    assert scaled.normal_statistic == pytest.approx(plain.normal_statistic, rel=1e-6)


def test_returns_that_repeat_each_other_count_once() -> None:
    """Ten symbols with the same returns say no more than one: the sessions say so."""
    returns = simulated(11)
    many = np.tile(returns, 10)
    session = np.tile(np.arange(len(returns)), 10)
    one, ten = fit_levels(returns), fit_levels(many, session)
    assert ten.dependence == pytest.approx([10.0 * value for value in one.dependence], rel=0.3)
    assert ten.level_rate_interval == pytest.approx(one.level_rate_interval, rel=0.3)
