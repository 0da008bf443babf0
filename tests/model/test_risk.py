"""Variance of the cost against direct integration and closed forms."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.model.risk import remaining, variance
from scheduler.problem import Orders
from tests.builders import order, variance_of
from tests.model.direct import stage_variances
from tests.model.test_impact import random_case


def _unit(orders: Orders) -> float:
    """Variance of holding Q for a day in a market of imbalance Q/L throughout."""
    m = orders.market
    crowd = 1.0 + (orders.quantity + abs(orders.initial)) / m.relaxation_volume
    return float((m.price**2 * orders.quantity**2 * m.vol**2 * crowd)[0])


@pytest.mark.parametrize("seed", range(60))
def test_each_stage_adds_what_direct_integration_says(seed: int) -> None:
    """p^2 h int x^2 (sigma^2 + phi sigma_0^2 |Z|/L) du, the last part while there is trading."""
    orders, shares = random_case(seed, feedback=1.7)
    base, own = variance(orders.stages, orders.market, orders.quantity, shares, orders.initial)
    error = base + own - stage_variances(orders, shares)
    assert np.abs(error).max() < 1e-6 * _unit(orders)


def test_evenly_traded_order_has_a_third_of_the_variance_of_holding() -> None:
    """int_0^1 (1-u)^2 du = 1/3, sigma^2 X^2 T/3 (Almgren & Chriss 2001, eq. 11 as N grows)."""
    orders = order([0.5], share=[0.8], feedback=0.0)
    held = (50.0 * 5e4 * 0.02) ** 2 * 0.8
    assert variance_of(orders, orders.quantity) == pytest.approx(held / 3.0)


def test_closed_period_adds_its_variance_without_feedback() -> None:
    """Nothing is traded overnight, so what is outstanding does not raise the variance."""
    closed = order([0.1, 0.2, 0.1], share=[0.0, 0.3, 0.0], is_open=[True, False, True])
    shares = np.array([2e4, 0.0, 3e4])
    held = (50.0 * 3e4 * 0.02) ** 2 * 0.3
    assert variance_of(closed, shares) == pytest.approx(held)
    halted = order([0.1, 0.2, 0.1], share=[0.0, 0.3, 0.0])
    assert variance_of(halted, shares) > 1.01 * held


def test_own_part_is_proportional_to_feedback_and_vanishes_without() -> None:
    shares = np.array([2e4, 3e4])
    parts = [
        variance(o.stages, o.market, o.quantity, shares, o.initial)
        for o in (order([0.1, 0.2], feedback=phi) for phi in (0.0, 1.0, 3.0))
    ]
    assert (parts[0][1] == 0.0).all()
    assert parts[2][1] == pytest.approx(3.0 * parts[1][1])
    assert (parts[0][0] == parts[1][0]).all()


def test_steady_trading_raises_the_variance_rate_by_its_participation() -> None:
    """Ground variance times 1 + 2 nu + phi q/V once the imbalance is stationary [Orrell 2020]."""
    orders = order([1e-5], share=[0.2], quantity=1e9, initial=0.3 * 5e4, level_rate=0.25)
    base, own = variance(
        orders.stages, orders.market, orders.quantity, np.array([0.3 * 10.0]), orders.initial
    )
    assert own / base == pytest.approx(0.3 / 1.5, rel=1e-6)


def test_reading_of_either_sign_raises_the_variance() -> None:
    volume, shares = [0.1, 0.1], np.zeros(2)
    plain = variance_of(order(volume), shares)
    assert variance_of(order(volume, initial=2e4), shares) > plain
    up, down = (variance_of(order(volume, initial=z), shares) for z in (2e4, -2e4))
    assert up == pytest.approx(down)


@given(st.integers(0, 2**32 - 1))
@settings(max_examples=60, deadline=None)
def test_a_fixed_even_schedule_is_as_risky_under_any_bucketing(seed: int) -> None:
    """Variance and volume of an open bucket spread evenly over its pieces."""
    rng = np.random.default_rng(seed)
    orders, shares = random_case(seed)
    orders = replace(orders, stages=replace(orders.stages, open=np.ones(len(shares), dtype=bool)))
    pieces = rng.integers(1, 6, len(shares))
    parts = np.concatenate([rng.dirichlet(np.ones(n)) for n in pieces])
    finer = order(
        np.repeat(orders.stages.theta * orders.market.relaxation, pieces) * parts,
        quantity=orders.quantity[0],
        initial=orders.initial[0],
        share=np.repeat(orders.stages.variance, pieces) * parts,
        exponent=orders.market.exponent[0],
        relaxation=orders.market.relaxation[0],
    )
    difference = variance_of(finer, np.repeat(shares, pieces) * parts) - variance_of(orders, shares)
    assert abs(difference[0]) < 1e-6 * _unit(orders)


def test_auction_carries_no_variance() -> None:
    """Volume without variance: an order only there has none."""
    orders = order([0.08], share=[0.0])
    assert variance_of(orders, orders.quantity) == 0.0


def test_remaining_counts_down_to_nothing() -> None:
    orders = order([0.1, 0.1, 0.1], quantity=600.0)
    left, after = remaining(orders.stages.layout, orders.quantity, np.array([100.0, 200.0, 300.0]))
    assert left.tolist() == [600.0, 500.0, 300.0]
    assert after.tolist() == [500.0, 300.0, 0.0]
