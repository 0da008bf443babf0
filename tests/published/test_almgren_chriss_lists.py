"""Many names at once: R. Almgren, N. Chriss, J. Risk 3(2), 5-39 (2001), appendix on portfolios.

Temporary impact is diagonal, eta_i; C is the covariance of the prices. With H = diag(eta) and
A = H^-1/2 C H^-1/2 the optimum of E + lambda V in continuous time obeys, in y = H^1/2 x,

    y'' = lambda A y,    y(t) = U diag(sinh kappa_j (T - t) / sinh kappa_j T) U' y(0),

A = U diag(a) U', kappa_j^2 = lambda a_j; x is signed. In N periods of length tau it is the same
with 2 (cosh kappa_j tau - 1)/tau^2 = lambda a_j, eta less gamma tau/2 where impact is permanent.
The formulas are evaluated here, the paper prints no numbers for them.
"""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.solve import joint
from tests.builders import order
from tests.solve.lists import Linked, linked

ADV, DAYS = 1e6, 1.0
QUANTITY = np.array([1e5, 6e4, 8e4])
SIDE = np.array([1, 1, -1])
PRICE = np.array([50.0, 20.0, 80.0])
VOL = np.array([0.02, 0.03, 0.015])
ETA = np.array([2e-6, 3e-6, 1.5e-6])  # currency a share, for a share a day
# two factors, and a part of their own
EXPOSURES = np.array([[0.6, 0.3], [0.5, -0.4], [0.7, 0.1]]) * VOL[:, None]


def _covariance() -> Array:
    """(3, 3) of the prices, per day."""
    relative = EXPOSURES @ EXPOSURES.T
    np.fill_diagonal(relative, VOL**2)
    result: Array = PRICE[:, None] * relative * PRICE
    return result


def _exact(times: Array, risk_aversion: float, eta: Array, period: float = 0.0) -> Array:
    """(3, times) signed holdings; in continuous time, or in periods of the given length."""
    root = np.sqrt(eta)
    values, vectors = np.linalg.eigh(_covariance() / np.outer(root, root))
    kappa = np.sqrt(risk_aversion * values)
    if period:
        kappa = np.arccosh(1.0 + 0.5 * (kappa * period) ** 2) / period
    start = vectors.T @ (root * SIDE * QUANTITY)
    shape = np.sinh(kappa[:, None] * (DAYS - times)) / np.sinh(kappa[:, None] * DAYS)
    result: Array = (vectors @ (shape * start[:, None])) / root[:, None]
    return result


def _left(listed: Linked, risk_aversion: float) -> Array:
    """(3, buckets) signed holdings after each bucket, of the optimum at lambda per currency."""
    solution = joint.solve(
        listed.problem,
        listed.coupling,
        risk_aversion=risk_aversion * listed.unit,
        tolerance=1e-12,
    )
    assert solution.converged
    left = 1.0 - listed.problem.layout.cumsum(solution.fractions)
    result: Array = (SIDE * QUANTITY)[:, None] * left.reshape(3, -1)
    return result


def _periods(count: int) -> Linked:
    """A block at the start of each period, then volume in which its imbalance is forgotten."""
    tau = DAYS / count
    orders = [
        order(
            np.tile([0.0, 60.0], count),
            cap=np.tile([np.inf, 0.0], count),
            share=np.tile([0.0, tau], count),
            quantity=quantity,
            price=price,
            adv=ADV,
            vol=vol,
            level_rate=0.0,
            relaxation=1.0,
            coefficient=2.0 * eta / tau * ADV / (price * vol),  # c q^2/2 = eta q^2/tau
            exponent=1.0,
            feedback=0.0,
        )
        for quantity, price, vol, eta in zip(QUANTITY, PRICE, VOL, ETA, strict=True)
    ]
    return linked(orders, EXPOSURES, side=SIDE.tolist())


def _continuous(relaxation: float, buckets: int) -> Linked:
    """Imbalance that relaxes at once: the cost of the rate; eta is held fixed as r falls."""
    orders = [
        order(
            np.full(buckets, 1.0 / buckets),
            quantity=quantity,
            price=price,
            adv=ADV,
            vol=vol,
            level_rate=0.0,
            relaxation=relaxation,
            coefficient=eta * ADV / (vol * price * relaxation),
            exponent=1.0,
            feedback=0.0,
        )
        for quantity, price, vol, eta in zip(QUANTITY, PRICE, VOL, ETA, strict=True)
    ]
    return linked(orders, EXPOSURES, side=SIDE.tolist())


def _aversion(curvature: float) -> float:
    """lambda at which the slowest combination has kappa T = `curvature`."""
    root = np.sqrt(ETA)
    least = np.linalg.eigvalsh(_covariance() / np.outer(root, root))[0]
    return float(curvature**2 / least)


@pytest.mark.parametrize("curvature", [0.3, 1.0, 2.5])
@pytest.mark.parametrize("count", [5, 12])
def test_trajectories_in_periods(count: int, curvature: float) -> None:
    """Holdings after each period's trade, to 1e-6 of the largest order."""
    risk_aversion, tau = _aversion(curvature), DAYS / count
    times = np.arange(1, count + 1) * tau
    exact = _exact(times, risk_aversion, ETA, tau)
    assert (np.diff(np.abs(exact), axis=1) < 0.0).all()  # nothing is bought back
    found = _left(_periods(count), risk_aversion)
    assert found == pytest.approx(exact, abs=1e-6 * QUANTITY.max())


def test_hedging_is_seen_in_the_trajectories() -> None:
    """Were covariances left out, holdings would be off by 1 % of the order and more."""
    risk_aversion = _aversion(1.0)
    times = np.arange(1, 13) / 12
    kappa = np.sqrt(risk_aversion * np.diag(_covariance()) / ETA)[:, None]
    kappa = np.arccosh(1.0 + 0.5 * (kappa / 12) ** 2) * 12
    alone = np.sinh(kappa * (1.0 - times)) / np.sinh(kappa) * (SIDE * QUANTITY)[:, None]
    found = _left(_periods(12), risk_aversion)
    assert np.abs(found - alone).max() > 1e-2 * QUANTITY.max()


@pytest.mark.parametrize("curvature", [0.3, 1.0])
def test_continuous_trajectories(curvature: float) -> None:
    """As r -> 0; the distance is proportional to r."""
    buckets = 80
    risk_aversion = _aversion(curvature)
    times = np.arange(1, buckets + 1) / buckets
    exact = _exact(times, risk_aversion, ETA)
    distances = []
    for relaxation in (1e-3, 5e-4, 2.5e-4):
        found = _left(_continuous(relaxation, buckets), risk_aversion)
        distances.append(float(np.abs((found - exact) / QUANTITY[:, None]).max()))
    fastest = np.sqrt(
        risk_aversion * np.linalg.eigvalsh(_covariance() / np.sqrt(np.outer(ETA, ETA)))[-1]
    )
    assert distances[1] < 0.6 * 5e-4 * max(1.0, fastest)
    assert distances[0] / distances[1] == pytest.approx(2.0, abs=0.3)
    assert distances[1] / distances[2] == pytest.approx(2.0, abs=0.3)
