"""Optimal schedules of A. Alfonsi, A. Fruth, A. Schied, "Optimal execution strategies in limit
order books with general shape functions", Quantitative Finance 10(2), 143-157 (2010), model 1.

For impact proportional to u^delta the paper's equations, from memory, reduce to closed forms; the
numbers were recomputed from these and checked by brute-force minimisation.
"""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.model.impact import impact_scale
from scheduler.model.ragged import Array
from scheduler.problem import Orders
from tests.builders import cost_of, order, schedule

HORIZON = 2.0  # rho T of the published numbers; sessions of volume over r here
RELAXATION = 0.25


def _unit_cost(orders: Orders, shares: Array) -> float:
    """Cost over c Q^{1+delta}: the integral of u^delta along the executed volume for Q = 1."""
    scale = impact_scale(orders.market) * orders.quantity ** (1.0 + orders.market.exponent)
    return float((cost_of(orders, shares) / scale)[0])


def _between_blocks(
    exponent: float, buckets: int, *, horizon: float = HORIZON, frozen: bool = False
) -> Orders:
    """A block, then volume buckets (a block after each, where they are frozen), then a block."""
    volume = np.full(buckets, horizon * RELAXATION / buckets)
    if frozen:
        stages = np.append(np.column_stack((np.zeros(buckets), volume)).ravel(), 0.0)
        cap = np.where(stages > 0.0, 0.0, np.inf)
    else:
        stages = np.concatenate(([0.0], volume, [0.0]))
        cap = np.full(len(stages), np.inf)
    return order(stages, cap=cap, relaxation=RELAXATION, exponent=exponent)


def _only_buckets(exponent: float, buckets: int, horizon: float = HORIZON) -> Orders:
    volume = np.full(buckets, horizon * RELAXATION / buckets)
    return order(volume, relaxation=RELAXATION, exponent=exponent)


def _first_block(exponent: float, horizon: float = HORIZON) -> float:
    """xi/Q = 1/(T/r + (1 + delta)^{1/delta})."""
    return float(1.0 / (horizon + (1.0 + exponent) ** (1.0 / exponent)))


def _least_cost(exponent: float, horizon: float = HORIZON) -> float:
    """(1 - xi T/r)^{1+delta}/(1+delta) + (T/r) xi^{1+delta}."""
    first = _first_block(exponent, horizon)
    power = 1.0 + exponent
    return (1.0 - first * horizon) ** power / power + horizon * first**power


CONTINUOUS = [
    (1 / 3, 0.228814, 0.457627, 0.313559),
    (1 / 2, 0.235294, 0.470588, 0.294118),
    (2 / 3, 0.240868, 0.481735, 0.277397),
    (1.0, 0.25, 0.5, 0.25),
    (2.0, 0.267949, 0.535898, 0.196152),
]
LEAST_COST = {1 / 2: 0.485071, 1.0: 0.25, 2.0: 0.071797}


@pytest.mark.parametrize(("exponent", "first", "middle", "last"), CONTINUOUS)
@pytest.mark.parametrize("buckets", [1, 7])
def test_continuous_limit_with_blocks_at_both_ends(
    exponent: float, first: float, middle: float, last: float, buckets: int
) -> None:
    """Uncapped buckets without volume hold the blocks; the rate between them is constant."""
    orders = _between_blocks(exponent, buckets)
    shares = schedule(orders, tolerance=1e-13) / orders.quantity
    assert shares[0] == pytest.approx(first, abs=2e-6)
    assert shares[1:-1] == pytest.approx(np.full(buckets, middle / buckets), abs=2e-6)
    assert shares[-1] == pytest.approx(last, abs=2e-6)
    cost = _unit_cost(orders, shares * orders.quantity)
    assert cost == pytest.approx(_least_cost(exponent), abs=1e-6)
    assert cost == pytest.approx(LEAST_COST.get(exponent, cost), abs=1e-6)


@pytest.mark.parametrize("horizon", [0.1, 1.0, 20.0])
def test_continuous_limit_at_other_horizons(horizon: float) -> None:
    """delta = 1/2: xi = Q/(T/r + 2.25), last block 1.25 xi."""
    orders = _between_blocks(0.5, 4, horizon=horizon)
    shares = schedule(orders, tolerance=1e-13) / orders.quantity
    first = 1.0 / (horizon + 2.25)
    assert shares[0] == pytest.approx(first, abs=1e-5)
    assert shares[-1] == pytest.approx(1.25 * first, abs=1e-5)
    assert shares[1:-1] == pytest.approx(np.full(4, first * horizon / 4), abs=1e-5)


@pytest.mark.parametrize(
    ("exponent", "first", "interior", "last", "cost"),
    [
        (1 / 3, 0.252153, 0.045708, 0.336478, None),
        (1 / 2, 0.259264, 0.046997, 0.317766, 0.485356),
        (2 / 3, 0.265375, 0.048104, 0.301686, None),
        (1.0, 0.275374, 0.049917, 0.275374, 0.250416),
        (2.0, 0.294953, 0.053466, 0.223853, 0.072180),
    ],
)
def test_eleven_equidistant_trades_to_six_digits(
    exponent: float, first: float, interior: float, last: float, cost: float | None
) -> None:
    """N = 10, rho T = 2: blocks alternate with volume in which nothing may be traded."""
    orders = _between_blocks(exponent, 10, frozen=True)
    shares = schedule(orders, tolerance=1e-13)
    trades = shares[::2] / orders.quantity
    assert (shares[1::2] == 0.0).all()
    assert trades[0] == pytest.approx(first, abs=1.5e-6)
    assert trades[1:-1] == pytest.approx(np.full(9, interior), abs=1.5e-6)
    assert trades[-1] == pytest.approx(last, abs=1.5e-6)
    if cost is not None:
        assert _unit_cost(orders, shares) == pytest.approx(cost, abs=6e-7)


@pytest.mark.parametrize("horizon", [2.0, 20.0])
@pytest.mark.parametrize("exponent", [1 / 3, 1 / 2, 2 / 3, 1.0, 2.0])
def test_cost_of_buckets_alone_approaches_the_limit(exponent: float, horizon: float) -> None:
    """A bucket smears the block: O(1/N), with a ratio on halving that goes to 2 slowly.

    At 80 buckets and delta = 1/2: 0.18 % for T/r = 2, 0.30 % for T/r = 20, a session at r = 0.05.
    """
    errors = []
    for buckets in (40, 80, 160, 320):
        orders = _only_buckets(exponent, buckets, horizon)
        cost = _unit_cost(orders, schedule(orders))
        errors.append(cost / _least_cost(exponent, horizon) - 1.0)
    ratios = np.array(errors[:-1]) / errors[1:]
    assert (np.array(errors) > 0.0).all()
    assert errors[1] < 0.015
    assert ((ratios > 1.5) & (ratios < 2.1)).all()
    if exponent == 0.5:
        assert errors[1] == pytest.approx({2.0: 0.0018, 20.0: 0.0030}[horizon], abs=5e-5)


@pytest.mark.parametrize("exponent", [1 / 3, 1 / 2, 1.0, 2.0])
def test_cumulative_curve_of_buckets_alone_away_from_the_ends(exponent: float) -> None:
    """Within half a per cent of the order between a tenth and nine tenths of the horizon."""
    buckets = 160
    orders = _only_buckets(exponent, buckets)
    done = np.cumsum(schedule(orders)) / orders.quantity
    time = np.arange(1, buckets + 1) / buckets
    exact = _first_block(exponent) * (1.0 + HORIZON * time)
    inside = (time >= 0.1) & (time <= 0.9)
    assert np.abs(done - exact)[inside].max() < 0.005


def test_concave_impact_ends_with_the_larger_block_and_convex_begins_with_it() -> None:
    """delta < 1: last > first; delta = 1: equal; delta > 1: first > last."""
    for exponent in (0.3, 0.5, 1.0, 1.5, 2.0):
        orders = _between_blocks(exponent, 3)
        shares = schedule(orders, tolerance=1e-12) / orders.quantity
        difference = shares[-1] - shares[0]
        if exponent == 1.0:
            assert difference == pytest.approx(0.0, abs=1e-6)
        else:
            assert np.sign(difference) == np.sign(1.0 - exponent)


def test_imbalance_stands_still_between_the_blocks() -> None:
    """Optimal trading just replaces what relaxes: Z = xi all the way, whatever the volume curve."""
    rng = np.random.default_rng(5)
    volume = rng.dirichlet(np.ones(8)) * HORIZON * RELAXATION
    stages = np.concatenate(([0.0], volume, [0.0]))
    orders = order(stages, cap=np.full(10, np.inf), relaxation=RELAXATION, exponent=0.5)
    shares = schedule(orders, tolerance=1e-13) / orders.quantity
    first = _first_block(0.5)
    assert shares[1:-1] == pytest.approx(first * volume / RELAXATION, abs=2e-6)
