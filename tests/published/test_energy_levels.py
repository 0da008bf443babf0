"""Numbers of D. Orrell, "A quantum model of supply and demand", Physica A 539, 122928 (2020).

The relations are the paper's; the numbers were recomputed from them for this test, apart from
the displacement and variance rules, which are the relations themselves.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from scheduler.model.impact import displacement
from scheduler.model.mixture import CostDistribution
from scheduler.model.risk import variance
from scheduler.model.state import imbalance
from tests.builders import market, order


def _session(level_rate: float) -> CostDistribution:
    """A holding over one session, ground variance 1: base variance 1 + 2 nu."""
    rate = np.array([level_rate])
    return CostDistribution(np.zeros(1), (1.0 + 2.0 * rate)[None], np.zeros((1, 1)), rate)


def _beyond(d: CostDistribution, x: float) -> float:
    return 2.0 * (1.0 - float(d.cdf(np.array([x]))[0]))


def _moment(d: CostDistribution, power: int) -> float:
    """E|X|^power = int power x^(power-1) P(|X| > x) dx."""
    return float(quad(lambda x: power * x ** (power - 1) * _beyond(d, x), 0, 60, epsrel=1e-9)[0])


@pytest.mark.parametrize("level_rate", [0.1, 0.25, 0.5, 1.0])
def test_variance_and_kurtosis_of_poisson_levels(level_rate: float) -> None:
    """Variance s^2 (1 + 2 nu); kurtosis 3 (1 + 8 nu + 4 nu^2)/(1 + 2 nu)^2, from the formula."""
    d = _session(level_rate)
    second, fourth = _moment(d, 2), _moment(d, 4)
    assert second == pytest.approx(1.0 + 2.0 * level_rate, rel=1e-7)
    kurtosis = 3.0 * (1.0 + 8.0 * level_rate + 4.0 * level_rate**2) / (1.0 + 2.0 * level_rate) ** 2
    assert fourth / second**2 == pytest.approx(kurtosis, rel=1e-7)


def test_kurtosis_is_four_and_a_half_at_one_half() -> None:
    d = _session(0.5)
    assert float(d.std[0]) ** 2 == pytest.approx(2.0)
    assert _moment(d, 4) / 4.0 == pytest.approx(4.5, rel=1e-7)


def test_density_at_zero_at_one_half() -> None:
    """0.327484/s, recomputed from the weights .60653 .30327 .07582 .01264 .00158."""
    step = 1e-4
    d = _session(0.5)
    density = (d.cdf(np.array([step])) - d.cdf(np.array([-step])))[0] / (2.0 * step)
    assert density == pytest.approx(0.327484, abs=5e-7)


@pytest.mark.parametrize(
    ("deviations", "published", "digits"),
    [(1.0, 0.26960, 5e-6), (2.0, 0.05374, 5e-6), (3.0, 0.01039, 5e-6), (4.0, 0.001716, 5e-7)],
)
def test_tails_at_one_half(deviations: float, published: float, digits: float) -> None:
    """P(|z| > k total standard deviations); a normal has .31731 .04550 .00270 .0000633."""
    d = _session(0.5)
    assert _beyond(d, deviations * float(d.std[0])) == pytest.approx(published, abs=digits)


def test_observed_volatility_is_root_one_and_a_half_times_ground() -> None:
    """sigma/sigma_0 = 1.2247 at nu = 1/4."""
    name = market(level_rate=0.25, vol=0.02)
    assert name.vol / name.ground_vol == pytest.approx(1.2247, abs=5e-5)


def test_square_root_constant_is_root_four_thirds_on_observed_volatility() -> None:
    """An order filled fast against L moves the price by 1.1547 sigma sqrt(Q/ADV).

    Filled fast, Z stays Q, so D = sqrt 2 sigma_0 sqrt(Q/ADV), and sigma_0 = sigma/sqrt 1.5.
    """
    quantity = 1e4
    fast = order([1e-7], quantity=quantity, vol=0.02, relaxation=1.0)
    _, end = imbalance(fast.stages.layout, fast.stages.theta, np.array([quantity]), fast.initial)
    constant = displacement(fast.market, end) / (0.02 * np.sqrt(quantity / 1e6))
    assert constant == pytest.approx(np.sqrt(4.0 / 3.0), rel=1e-6)
    assert constant == pytest.approx(1.1547, abs=5e-5)


@pytest.mark.parametrize("iota", [-2.0, -0.5, 0.5, 1.0, 4.0])
def test_displacement_and_spread_of_an_imbalance(iota: float) -> None:
    """x = sqrt 2 s sqrt|iota|; variance s^2 (1 + |iota|), that of level n at |iota| = 2 n.

    s = sigma_0 sqrt r is ground volatility over one relaxation volume; nu = 0 isolates one level.
    """
    r = 0.05
    still = order(
        [1e-9], share=[r], quantity=1.0, initial=iota * r * 1e6, level_rate=0.0, price=1.0
    )
    s = 0.02 * np.sqrt(r)
    moved = displacement(still.market, still.initial)
    assert moved == pytest.approx(np.sign(iota) * np.sqrt(2.0 * abs(iota)) * s)
    base, own = variance(still.stages, still.market, still.quantity, np.zeros(1), still.initial)
    assert base + own == pytest.approx(s**2 * (1.0 + abs(iota)))
