"""R. Almgren, N. Chriss, "Optimal execution of portfolio transactions", J. Risk 3(2), 5-39 (2001).

Inputs of Table 1: 1e6 shares at 50 $, T = 5 days, sigma = 0.95 $/share/day^.5, eps = 0.0625 $,
eta = 2.5e-6, gamma = 2.5e-7, daily volume 5e6. Costs and variances of the discrete problem were
recomputed from the paper's equations 17, 18 and 20 (a linear system agrees to all digits).

The discrete model is a special case of this one: each period's trade is a block, c q^2/2 with
c = 2 eta~/tau and eta~ = eta - gamma tau/2, followed by volume in which nothing is traded and so
much of it that the imbalance is gone at the end; eps is a charge, gamma the permanent part.
"""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.model.impact import permanent_cost
from scheduler.model.ragged import Array
from scheduler.problem import Orders
from tests.builders import cost_of, order, schedule, variance_of

X, PRICE, DAYS, ADV = 1e6, 50.0, 5.0, 5e6
SIGMA, EPS, ETA, GAMMA = 0.95, 0.0625, 2.5e-6, 2.5e-7
FORGOTTEN = 60.0  # theta: e^-60 of the imbalance is left


def _periods(
    count: int, *, risk_aversion: float = 0.0, urgency: float = 0.0, held: float = X
) -> Orders:
    """Table 1 in `count` equal periods over what is left of T when `held` shares are left."""
    tau = DAYS / count
    vol = SIGMA / PRICE
    c = 2.0 * (ETA - GAMMA * tau / 2.0) / tau
    cap = np.tile([np.inf, 0.0], count)
    return order(
        np.tile([0.0, FORGOTTEN], count),
        cap=cap,
        share=np.tile([0.0, tau], count),
        quantity=held,
        charge=EPS,
        risk_aversion=risk_aversion,
        urgency=urgency,
        price=PRICE,
        adv=ADV,
        vol=vol,
        level_rate=0.0,
        relaxation=1.0,
        coefficient=c * ADV / (PRICE * vol),
        exponent=1.0,
        feedback=0.0,
        permanent=GAMMA * ADV / (vol * PRICE),
    )


def _expected(orders: Orders, shares: Array) -> float:
    permanent = permanent_cost(orders.market, orders.quantity)
    return float((cost_of(orders, shares) + permanent)[0])


def _risk(orders: Orders, shares: Array) -> float:
    return float(variance_of(orders, shares)[0])


@pytest.mark.parametrize(
    ("risk_aversion", "holdings", "cost", "variance"),
    [
        (2e-6, (428_599, 182_933, 76_296, 27_643), 1_140_715, 2.019313e11),
        (1e-6, (541_956, 289_854, 147_897, 62_142), 911_227, 3.641286e11),
        (1e-7, (757_882, 544_564, 351_940, 172_689), 670_057, 9.247186e11),
        (0.0, (800_000, 600_000, 400_000, 200_000), 662_500, 1.083000e12),
    ],
)
def test_five_period_trajectories(
    risk_aversion: float, holdings: tuple[float, ...], cost: float, variance: float
) -> None:
    """Trajectory A, the tangent point, a patient one and B of the paper's figure 1, to a share."""
    orders = _periods(5, risk_aversion=risk_aversion)
    shares = schedule(orders, tolerance=1e-13)
    held = X - np.cumsum(shares[::2])
    assert held[:-1] == pytest.approx(holdings, abs=1.0)
    assert _expected(orders, shares) == pytest.approx(cost, abs=0.6)
    assert _risk(orders, shares) == pytest.approx(variance, rel=1e-6)


def test_trading_all_at_once() -> None:
    """eps X + eta X^2/tau = 2,562,500 $ without variance, equation 13."""
    orders = _periods(5)
    shares = np.zeros(10)
    shares[0] = X
    assert _expected(orders, shares) == pytest.approx(2_562_500.0)
    assert _risk(orders, shares) == 0.0


def test_holding_for_the_whole_time() -> None:
    """Standard deviation 2.12 million $ (printed in section 3.4), sigma X sqrt T."""
    orders = _periods(5)
    shares = np.zeros(10)
    assert np.sqrt(_risk(orders, shares)) == pytest.approx(2.12e6, rel=3e-3)


def test_value_at_risk_optimum() -> None:
    """Least E + 1.645 sqrt V: 1,877,207 $ at lambda = 1.6944e-6, recomputed; figure 3's tangent."""
    orders = _periods(5, urgency=1.645)
    shares = schedule(orders, tolerance=1e-13)
    cost, deviation = _expected(orders, shares), np.sqrt(_risk(orders, shares))
    assert cost + 1.645 * deviation == pytest.approx(1_877_207, abs=1.0)
    assert 1.645 / (2.0 * deviation) == pytest.approx(1.6944e-6, rel=5e-5)
    held = X - np.cumsum(shares[::2])
    assert held[:-1] == pytest.approx((456_655, 207_336, 91_513, 34_613), abs=2.0)
    same = schedule(_periods(5, risk_aversion=1.645 / (2.0 * deviation)), tolerance=1e-13)
    assert same == pytest.approx(shares, abs=1.0)


@pytest.mark.parametrize(
    ("risk_aversion", "least"), [(2e-6, 1_879_925), (1e-6, 1_903_870), (0.0, 2_374_407)]
)
def test_value_at_risk_along_the_frontier(risk_aversion: float, least: float) -> None:
    """E + 1.645 sqrt V of the mean-variance optima, recomputed."""
    orders = _periods(5, risk_aversion=risk_aversion)
    shares = schedule(orders, tolerance=1e-13)
    at_risk = _expected(orders, shares) + 1.645 * np.sqrt(_risk(orders, shares))
    assert at_risk == pytest.approx(least, abs=1.0)


@pytest.mark.parametrize(
    ("periods", "cost", "deviation"),
    [(10, 945_216, 723_822), (50, 961_940, 828_686), (500, 964_306, 853_103)],
)
def test_results_depend_on_the_number_of_periods(
    periods: int, cost: float, deviation: float
) -> None:
    """lambda = 1e-6, recomputed; the continuous limit is 964,537 and 855,832."""
    orders = _periods(periods, risk_aversion=1e-6)
    shares = schedule(orders, tolerance=1e-12)
    assert _expected(orders, shares) == pytest.approx(cost, abs=0.6)
    assert np.sqrt(_risk(orders, shares)) == pytest.approx(deviation, abs=0.6)


def test_half_life_does_not_depend_on_the_size() -> None:
    """kappa of equation 17 holds for any X; x_j is proportional to X."""
    large = schedule(_periods(5, risk_aversion=1e-6), tolerance=1e-13)
    small = schedule(_periods(5, risk_aversion=1e-6, held=1e3), tolerance=1e-13)
    assert small / 1e3 == pytest.approx(large / X, abs=1e-6)


def test_a_quieter_aversion_gives_a_cheaper_and_riskier_trajectory() -> None:
    """The frontier of figure 1: E falls and V rises as lambda falls."""
    costs, risks = [], []
    for risk_aversion in (1e-5, 2e-6, 1e-6, 1e-7, 0.0):
        orders = _periods(5, risk_aversion=risk_aversion)
        shares = schedule(orders, tolerance=1e-12)
        costs.append(_expected(orders, shares))
        risks.append(_risk(orders, shares))
    assert costs == sorted(costs, reverse=True)
    assert risks == sorted(risks)


# continuous time: imbalance that relaxes at once is the paper's temporary impact of the rate
def _continuous(relaxation: float, buckets: int, curvature: float) -> tuple[Orders, float]:
    """One session, kappa T = `curvature`; eta = k sigma_0 p r/ADV is held fixed as r falls."""
    eta, adv = 2e-6, 1e6
    vol = 0.02
    orders = order(
        np.full(buckets, 1.0 / buckets),
        quantity=1e5,
        risk_aversion=curvature**2 * eta / (vol * PRICE) ** 2,
        price=PRICE,
        adv=adv,
        vol=vol,
        level_rate=0.0,
        relaxation=relaxation,
        coefficient=eta * adv / (vol * PRICE * relaxation),
        exponent=1.0,
        feedback=0.0,
    )
    return orders, eta


@pytest.mark.parametrize("curvature", [0.5, 2.0, 5.0])
def test_continuous_trajectory_is_a_hyperbolic_sine(curvature: float) -> None:
    """x(t) = X sinh kappa(T - t)/sinh kappa T as r -> 0; the distance is proportional to r."""
    buckets = 100
    time = np.arange(1, buckets + 1) / buckets
    exact = np.sinh(curvature * (1.0 - time)) / np.sinh(curvature)
    distances = []
    for relaxation in (1e-3, 5e-4, 2.5e-4):
        orders, _ = _continuous(relaxation, buckets, curvature)
        left = 1.0 - np.cumsum(schedule(orders, tolerance=1e-12)) / orders.quantity
        distances.append(np.abs(left - exact).max())
    assert distances[1] < 0.6 * 5e-4 * max(1.0, curvature)
    assert distances[0] / distances[1] == pytest.approx(2.0, abs=0.25)
    assert distances[1] / distances[2] == pytest.approx(2.0, abs=0.15)


def test_continuous_cost_and_variance() -> None:
    """The continuous limits of equation 20, k = kappa, T = 1.

    E = eta X^2 k [sinh 2k + 2k]/(4 sinh^2 k), V = sigma^2 X^2 [sinh 2k - 2k]/(4 k sinh^2 k).
    """
    k, relaxation = 2.0, 2e-4
    orders, eta = _continuous(relaxation, 200, k)
    shares = schedule(orders, tolerance=1e-12)
    square = 4.0 * np.sinh(k) ** 2
    cost = eta * 1e10 * k * (np.sinh(2 * k) + 2 * k) / square
    variance = (0.02 * PRICE * 1e5) ** 2 * (np.sinh(2 * k) - 2 * k) / (k * square)
    assert _expected(orders, shares) == pytest.approx(cost, rel=2e-4)
    assert _risk(orders, shares) == pytest.approx(variance, rel=5e-4)
