"""What caps and ceilings allow, against a linear programme that knows no shortcut."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog

from scheduler.problem import Orders
from scheduler.solve.feasible import forced_shares, reach
from scheduler.solve.schedule import schedule
from tests.builders import join, order

seeds = st.integers(0, 2**32 - 1)
many = settings(max_examples=60, deadline=None)


def _drawn(seed: int) -> Orders:
    """Caps around enough, closed buckets, up to three ceilings, any of them perhaps too low."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 12))
    volume = rng.uniform(0.2, 1.0, count)
    cap = volume * (rng.random(count) > 0.2)
    cap[rng.integers(count)] += 0.3
    quantity = 1e4 * float(rng.choice([0.5, 0.9, 1.1]))
    cap *= 1e4 / cap.sum()
    orders = order(volume / volume.sum(), cap=cap, quantity=quantity)
    ceiling = np.full(count, np.inf)
    for at in rng.integers(0, count, int(rng.integers(0, 4))):
        ceiling[at] = quantity * rng.uniform(0.0, 1.0)
    return replace(orders, ceiling=ceiling)


def _most(orders: Orders, ceilings: int) -> float | None:
    """Most shares that can trade with the first so many ceilings kept; None if none can."""
    count = len(orders.cap)
    due = np.flatnonzero(np.isfinite(orders.ceiling[:ceilings]))
    found = linprog(
        -np.ones(count),
        A_ub=np.vstack((np.ones((1, count)), -np.tri(count)[due])),
        b_ub=np.concatenate((orders.quantity, orders.ceiling[due] - orders.quantity)),
        bounds=[(0.0, cap) for cap in orders.cap],
        method="highs",
    )
    return None if found.x is None else -float(found.fun)


@given(seeds)
@many
def test_reach_is_what_a_linear_programme_finds(seed: int) -> None:
    """The most that can trade, and the first ceiling that no schedule keeps."""
    orders = _drawn(seed)
    found = reach(orders)
    most = _most(orders, 0)
    assert most == pytest.approx(min(found.most[0], orders.quantity[0]))
    late = int(found.late[0])
    kept = len(orders.cap) if late < 0 else late
    assert _most(orders, kept) is not None
    if late >= 0:
        assert _most(orders, late + 1) is None
        assert found.least_left[0] > orders.ceiling[late]
        raised = orders.ceiling.copy()
        raised[late] = found.least_left[0] + 1e-6
        assert _most(replace(orders, ceiling=raised), late + 1) is not None


@given(st.lists(seeds, min_size=2, max_size=5))
@settings(max_examples=20, deadline=None)
def test_reach_of_a_list_is_that_of_each(chosen: list[int]) -> None:
    orders = [_drawn(seed) for seed in chosen]
    together = reach(join(orders))
    for i, one in enumerate(orders):
        alone = reach(one)
        for name in ("most", "late", "least_left"):
            assert getattr(together, name)[i] == pytest.approx(getattr(alone, name)[0])


def test_orders_without_a_choice() -> None:
    """Caps that add up to the quantity or less, and a single bucket, are forced; others not."""
    full = order([0.3, 0.3, 0.4], cap=[10.0, 0.0, 20.0], quantity=30.0)
    short = order([0.3, 0.3, 0.4], cap=[10.0, 5.0, 20.0], quantity=90.0)
    single = order([0.3, 0.3, 0.4], cap=[0.0, 80.0, 0.0], quantity=30.0)
    free = order([0.3, 0.3, 0.4], cap=[10.0, 5.0, 20.0], quantity=30.0)
    shares, known = forced_shares(join([full, short, single, free]))
    assert known.tolist() == [True, True, True, False]
    expected = [10.0, 0.0, 20.0, 10.0, 5.0, 20.0, 0.0, 30.0, 0.0, 0.0, 0.0, 0.0]
    assert shares.tolist() == expected


@pytest.mark.parametrize("slack", [1e-13, 1e-9, 1e-6, 1e-3])
def test_hardly_any_choice_is_still_solved(slack: float) -> None:
    """Caps that add up to a hair above the quantity."""
    cap = np.array([4e3, 3e3, 2e3, 1e3])
    result = schedule(order([0.3, 0.3, 0.2, 0.2], cap=cap, quantity=1e4 * (1.0 - slack)))
    assert result.converged.all()
    assert result.shares == pytest.approx(cap, rel=max(1e4 * slack, 1e-6))
