"""Displacement and expected cost of impact against direct integration and exact identities."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.model.impact import (
    block_cost,
    displacement,
    impact_cost,
    impact_scale,
    permanent_cost,
)
from scheduler.model.ragged import Array
from scheduler.model.state import imbalance
from scheduler.problem import Orders
from tests.builders import cost_of, join, market, order
from tests.model.direct import cost_by_differential_equation, stage_costs


def _unit(orders: Orders) -> float:
    """c (Q + |Z_0|)^{1+delta}, what accuracy is relative to."""
    most = (orders.quantity + np.abs(orders.initial)) ** (1.0 + orders.market.exponent)
    return float((impact_scale(orders.market) * most)[0])


def _stage_impact(orders: Orders, shares: Array) -> Array:
    return impact_cost(orders.stages, orders.market, shares, orders.initial)


def random_case(seed: int, **parameters: Any) -> tuple[Orders, Array]:
    """An order of a few stages with blocks, idle stages, closed periods and any initial state."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 8))
    volume = 10.0 ** rng.uniform(-4, 0, count)
    volume[rng.random(count) < 0.2] = 0.0
    opened = rng.random(count) > 0.2
    shares = rng.random(count) * opened * (rng.random(count) > 0.2)
    if shares.sum() == 0.0:
        opened[0], shares[0] = True, 1.0
    quantity = 10.0 ** rng.uniform(3, 5.5)
    kind = {"exponent": float(rng.choice([0.05, 0.3, 0.5, 0.6, 1.0, 2.0]))}
    kind["relaxation"] = 10.0 ** rng.uniform(-3, 0.5)
    orders = order(
        volume,
        quantity=quantity,
        initial=quantity * float(rng.choice([0.0, 0.4, -0.01, -0.3, -2.0])),
        is_open=opened,
        share=rng.random(count) * 0.2,
        **(kind | parameters),
    )
    return orders, quantity * shares / shares.sum()


def test_displacement_is_the_oscillator_relation() -> None:
    """D = sqrt 2 sigma_L sqrt|iota|, sigma_L = sigma_0 sqrt r, iota = Z/L [Orrell 2020]."""
    name = market(relaxation=0.07, vol=0.03, level_rate=0.4, adv=2e6)
    iota = np.array([-1.3, -0.2, 0.0, 0.01, 0.9])
    expected = np.sqrt(2.0) * name.ground_vol * np.sqrt(0.07) * np.sqrt(abs(iota)) * np.sign(iota)
    assert displacement(name, iota * name.relaxation_volume) == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize("seed", range(60))
def test_each_stage_costs_what_direct_integration_says(seed: int) -> None:
    """p [int D(Z) dq - D(Z_0) q], with sign changes, blocks, closed periods, to 1e-5."""
    orders, shares = random_case(seed)
    error = _stage_impact(orders, shares) - stage_costs(orders, shares)
    assert np.abs(error).max() < 1e-5 * _unit(orders)


@pytest.mark.parametrize(
    ("exponent", "theta", "initial", "part"),
    [(0.5, 30.0, -1.0, 0.03), (0.6, 112.0, -0.3, 5e-4), (2.0, 240.0, -2.0, 0.3)],
)
def test_a_late_sign_change_in_a_long_bucket_is_as_accurate(
    exponent: float, theta: float, initial: float, part: float
) -> None:
    """Z falls by e^-4 and more before it crosses zero; costs still within 1e-5."""
    orders = order([theta * 0.05], initial=initial * 5e4, exponent=exponent)
    shares = part * orders.quantity
    error = _stage_impact(orders, shares) - stage_costs(orders, shares)
    assert np.abs(error).max() < 1e-5 * _unit(orders)


@pytest.mark.parametrize("initial", [0.0, 2e4, -3e4])
def test_cost_solves_the_differential_equation(initial: float) -> None:
    """A path with a sign change, a closed period and an idle bucket, integrated in time."""
    orders = order(
        [0.1, 0.02, 0.3, 0.05, 0.2],
        initial=initial,
        is_open=[True, True, True, False, True],
    )
    shares = np.array([2e4, 0.0, 1.5e4, 0.0, 1.5e4])
    expected = cost_by_differential_equation(orders, shares)
    assert cost_of(orders, shares)[0] == pytest.approx(expected, abs=1e-6 * _unit(orders))


@pytest.mark.parametrize("seed", range(20))
def test_stages_add_up_to_the_cost_integrated_by_parts(seed: int) -> None:
    """c [|Z_end|^p/p - |Z_0|^p/p + sum theta int |Z|^p + gaps] - p D(Z_0) Q, p = 1 + delta.

    Over a closed period and any other pure decay the integral is (1 - g^p)/p |Z_close|^p.
    """
    orders, _ = random_case(seed)
    power = 1.0 + orders.market.exponent[0]
    blocks = np.where(orders.stages.open, 1.0, 0.0)
    alternate = order(
        np.repeat(orders.stages.theta * orders.market.relaxation, 2) * np.tile([0, 1], len(blocks)),
        quantity=orders.quantity[0],
        initial=orders.initial[0],
        cap=np.full(2 * len(blocks), np.inf),
        exponent=power - 1.0,
        relaxation=orders.market.relaxation[0],
    )
    shares = np.zeros(2 * len(blocks))
    shares[::2] = orders.quantity * blocks / max(blocks.sum(), 1.0)
    if not blocks.any():
        shares[0] = orders.quantity[0]
    before, after = imbalance(
        alternate.stages.layout, alternate.stages.theta, shares, alternate.initial
    )
    z0, end = abs(alternate.initial[0]), abs(after[-1])
    gaps = (1.0 - np.exp(-power * alternate.stages.theta)) / power * np.abs(before) ** power
    total = impact_scale(alternate.market)[0] * ((end**power - z0**power) / power + gaps.sum())
    arrival = alternate.market.price * displacement(alternate.market, alternate.initial)
    expected = total - arrival[0] * alternate.quantity[0]
    assert cost_of(alternate, shares)[0] == pytest.approx(expected, abs=1e-9 * _unit(alternate))


@given(st.integers(0, 2**32 - 1))
@settings(max_examples=60, deadline=None)
def test_a_fixed_even_schedule_costs_the_same_under_any_bucketing(seed: int) -> None:
    """Cutting buckets at random places moves neither cost nor its sum per old bucket."""
    rng = np.random.default_rng(seed)
    orders, shares = random_case(seed)
    pieces = rng.integers(1, 6, len(shares))
    parts = np.concatenate([rng.dirichlet(np.ones(n)) for n in pieces])
    finer = order(
        np.repeat(orders.stages.theta * orders.market.relaxation, pieces) * parts,
        quantity=orders.quantity[0],
        initial=orders.initial[0],
        is_open=np.repeat(orders.stages.open, pieces),
        exponent=orders.market.exponent[0],
        relaxation=orders.market.relaxation[0],
    )
    cut = np.repeat(shares, pieces) * parts
    fine = np.add.reduceat(_stage_impact(finer, cut), np.cumsum(pieces) - pieces)
    coarse = _stage_impact(orders, shares)
    assert np.abs(fine - coarse).max() < 1e-5 * _unit(orders)


def test_cost_does_not_vanish_as_buckets_shrink() -> None:
    """Summing bucket-local costs q^{1+delta}, without the state, would fall to zero."""
    for count in (1, 10, 1000):
        orders = order(np.full(count, 0.5 / count), relaxation=0.2)
        cost = cost_of(orders, np.full(count, 5e4 / count))
        assert cost == pytest.approx(
            cost_of(order([0.5], relaxation=0.2), np.array([5e4])), rel=1e-5
        )


def test_average_paid_of_a_fast_order_is_two_thirds_of_its_end_displacement() -> None:
    """int_0^1 sqrt(u) du = 2/3 (Farmer, Gerig, Lillo & Waelbroeck 2013, from memory)."""
    orders = order([0.0], cap=[np.inf], price=1.0)
    paid = cost_of(orders, orders.quantity) / orders.quantity
    assert paid == pytest.approx(2.0 / 3.0 * displacement(orders.market, orders.quantity))


@pytest.mark.parametrize("exponent", [0.3, 0.5, 1.0, 2.0])
def test_a_residual_costs_what_a_block_bucket_costs(exponent: float) -> None:
    """And a block in two parts costs the same as in one."""
    name, start = market(exponent=exponent), 2e4
    orders = order([0.0], quantity=3e4, initial=start, cap=[np.inf], exponent=exponent)
    arrival = name.price * displacement(name, np.array([start])) * 3e4
    block = block_cost(name, np.array([start]), np.array([3e4]))
    assert block == pytest.approx(cost_of(orders, np.array([3e4])) + arrival, rel=1e-12)
    first = block_cost(name, np.array([start]), np.array([1e4]))
    second = block_cost(name, np.array([start + 1e4]), np.array([2e4]))
    assert block == pytest.approx(first + second, rel=1e-12)


def test_arrival_price_already_contains_a_reading() -> None:
    """With no relaxation left a slice pays only what it adds; a faded reading is money back."""
    orders = order([1e-9], quantity=1.0, initial=4e4, relaxation=1.0)
    assert cost_of(orders, np.ones(1)) == pytest.approx(0.0, abs=1e-4)
    faded = order([1.0, 0.1], quantity=1.0, initial=4e4, relaxation=0.01)
    given_back = -faded.market.price * displacement(faded.market, faded.initial)
    assert cost_of(faded, np.array([0.0, 1.0])) == pytest.approx(given_back, rel=1e-2)


def test_slices_of_nothing_and_closed_periods_cost_nothing() -> None:
    orders = order([0.1, 0.3, 0.1], initial=-1e4, is_open=[True, False, True], charge=0.02)
    costs = _stage_impact(orders, np.array([0.0, 0.0, 5e4]))
    assert (costs[:2] == 0.0).all()
    assert costs[2] != 0.0


def test_cost_is_homogeneous_in_price_volatility_and_size() -> None:
    """c Q^{1+delta}: linear in price and volatility, power 1 + delta in a scaled-up market."""
    volume, shares = [0.1, 0.2, 0.1], np.array([2e4, 1e4, 2e4])
    base = cost_of(order(volume, initial=5e3), shares)
    assert cost_of(order(volume, initial=5e3, price=150.0), shares) == pytest.approx(3 * base)
    assert cost_of(order(volume, initial=5e3, vol=0.06), shares) == pytest.approx(3 * base)
    larger = order(volume, quantity=1.5e5, initial=1.5e4)
    assert cost_of(larger, 3 * shares) == pytest.approx(3**1.5 * base)
    split = order(volume, quantity=1.5e5, initial=1.5e4, adv=3e6, price=50 / 3)
    assert cost_of(split, 3 * shares) == pytest.approx(base)


def test_permanent_cost_is_half_of_the_final_permanent_displacement() -> None:
    """(gamma sigma/2)(Q/ADV) Q p: the price moves linearly with what has been traded."""
    name = market(permanent=1.2, price=10.0, vol=0.03, adv=1e6)
    moved = 1.2 * 0.03 * 0.1
    assert permanent_cost(name, np.array([1e5])) == pytest.approx(0.5 * moved * 1e5 * 10.0)


def test_orders_laid_end_to_end_cost_what_each_costs_alone() -> None:
    cases = [random_case(seed) for seed in range(8)]
    together = join([orders for orders, _ in cases])
    shares = np.concatenate([s for _, s in cases])
    alone = np.concatenate([cost_of(*case) for case in cases])
    units = np.array([_unit(orders) for orders, _ in cases])
    assert (np.abs(cost_of(together, shares) - alone) < 1e-6 * units).all()
