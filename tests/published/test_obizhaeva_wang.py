"""A. Obizhaeva, J. Wang, "Optimal trading strategy and supply/demand dynamics", J. Financial
Markets 16(1), 1-32 (2013): linear impact (delta = 1) that recovers exponentially.

X_0 = 100,000, book density q = 5,000, lambda = 1/(2q) = 1e-4, kappa = 1e-4, T = 1. Trade sizes as
in the paper's table (from memory, reproduced by its formula); costs recomputed from the formulas.
The permanent part lambda X_0^2/2 is the same for every schedule.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.problem import Orders
from tests.builders import cost_of, order, schedule

X0 = 1e5
PERMANENT = 1e-4 * X0**2 / 2.0

# rho, first = last trade, continuous total, J*, J of the constant rate
TABLE = [
    (0.001, 49_975, 50, 999_750, 999_833),
    (1.0, 33_333, 33_333, 833_333, 867_879),
    (2.0, 25_000, 50_000, 750_000, 783_834),
    (4.0, 16_667, 66_667, 666_667, 688_645),
    (5.0, 14_286, 71_429, 642_857, 660_269),
    (10.0, 8_333, 83_333, 583_333, 590_000),
    (20.0, 4_545, 90_909, 545_455, 547_500),
    (50.0, 1_923, 96_154, 519_231, 519_600),
    (300.0, 331, 99_338, 503_311, 503_322),
    (1000.0, 100, 99_800, 500_998, 500_999),
    (10000.0, 10, 99_980, 500_100, 500_100),
]


def _book(volume: Any, rho: float, cap: Any = None) -> Orders:
    """Stages over one session of volume; c = p k sigma_0/ADV is kappa = 1e-4."""
    return order(
        volume,
        cap=np.full(len(volume), np.inf) if cap is None else cap,
        quantity=X0,
        exponent=1.0,
        relaxation=1.0 / rho,
        price=100.0,
        adv=1e6,
        vol=1.0,
        level_rate=0.0,
        coefficient=1.0,
    )


def _total(orders: Orders, shares: Array) -> float:
    return PERMANENT + float(cost_of(orders, shares)[0])


@pytest.mark.parametrize(("rho", "block", "between", "least", "constant"), TABLE)
def test_table_of_optimal_trades(
    rho: float, block: float, between: float, least: float, constant: float
) -> None:
    """Equal blocks X/(rho T + 2) at both ends, rho times a block evenly in between."""
    orders = _book([0.0, 1.0, 0.0], rho)
    shares = schedule(orders, tolerance=1e-13)
    assert shares == pytest.approx([block, between, block], abs=0.6)
    assert _total(orders, shares) == pytest.approx(least, abs=0.6)


@pytest.mark.parametrize(("rho", "block", "between", "least", "constant"), TABLE)
def test_table_of_constant_rate_costs(
    rho: float, block: float, between: float, least: float, constant: float
) -> None:
    """kappa X^2 (rho T - 1 + e^{-rho T})/(rho T)^2 beside the permanent part."""
    orders = _book([1.0], rho)
    assert _total(orders, np.array([X0])) == pytest.approx(constant, abs=0.6)
    finer = _book(np.full(50, 0.02), rho)
    assert _total(finer, np.full(50, X0 / 50)) == pytest.approx(constant, abs=0.6)


@pytest.mark.parametrize(
    ("rho", "trades", "first", "interior", "transient"),
    [
        (2.0, 5, 31_442.51, 12_371.66, 252_566.8),
        (2.0, 11, 27_537.41, 4_991.69, 250_415.7),
        (2.0, 101, 25_250.41, 499.99, 250_004.2),
        (20.0, 11, 10_222.88, 8_839.36, 58_032.0),
    ],
)
def test_equally_spaced_trades(
    rho: float, trades: int, first: float, interior: float, transient: float
) -> None:
    """First = last = X/(2 + (M - 2)(1 - a)), the others (1 - a) of it, a the decay between."""
    volume = np.zeros(2 * trades - 1)
    volume[1::2] = 1.0 / (trades - 1)
    orders = _book(volume, rho, cap=np.where(volume > 0.0, 0.0, np.inf))
    shares = schedule(orders, tolerance=1e-13)[::2]
    assert shares[[0, -1]] == pytest.approx([first, first], abs=0.05)
    assert shares[1:-1] == pytest.approx(np.full(trades - 2, interior), abs=0.05)
    full = np.zeros(len(volume))
    full[::2] = shares
    assert float(cost_of(orders, full)[0]) == pytest.approx(transient, abs=0.06)


@pytest.mark.parametrize("rho", [1.0, 5.0, 20.0])
def test_buckets_alone_approach_the_least_cost(rho: float) -> None:
    """O(1/N) from above as the buckets are halved."""
    least = 1e-4 * X0**2 / (rho + 2.0)
    errors = []
    for count in (50, 100, 200, 400):
        orders = _book(np.full(count, 1.0 / count), rho)
        errors.append(float(cost_of(orders, schedule(orders))[0]) / least - 1.0)
    ratios = np.array(errors[:-1]) / errors[1:]
    assert errors[-1] > 0.0
    assert ((ratios > 1.6) & (ratios < 2.2)).all()
    assert (np.diff(ratios) > 0.0).all()


def test_linear_impact_does_not_know_the_direction_of_time() -> None:
    """The decay kernel is symmetric: on a mirrored volume curve the optimum is mirrored."""
    rng = np.random.default_rng(11)
    volume = rng.dirichlet(np.ones(15))
    ahead, back = _book(volume, 5.0), _book(volume[::-1], 5.0)
    one, other = schedule(ahead, tolerance=1e-13), schedule(back, tolerance=1e-13)
    assert other[::-1] == pytest.approx(one, abs=1e-4 * X0)
    assert _total(back, other) == pytest.approx(_total(ahead, one), rel=1e-9)


def test_faster_recovery_is_cheaper_and_less_lumpy() -> None:
    """rho -> 0: half at each end; rho -> infinity: uniform with vanishing blocks."""
    blocks, costs = [], []
    for rho in (1e-3, 0.1, 1.0, 10.0, 1e3):
        orders = _book([0.0, 1.0, 0.0], rho)
        shares = schedule(orders, tolerance=1e-12)
        blocks.append(shares[0])
        costs.append(_total(orders, shares))
    assert blocks == sorted(blocks, reverse=True)
    assert costs == sorted(costs, reverse=True)
    assert blocks[0] == pytest.approx(X0 / 2.0, rel=1e-3)
