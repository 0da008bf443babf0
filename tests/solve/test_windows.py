"""Orders that share one state: what their windows need of the total, its division, whole lots."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.sparse import csr_array
from scipy.sparse.csgraph import maximum_flow

from scheduler.model.pools import Pools
from scheduler.model.ragged import Array
from scheduler.problem import Orders, Row, assemble
from scheduler.solve import conic
from scheduler.solve.pooled import solve_orders
from scheduler.solve.schedule import Status
from scheduler.solve.windows import divide, in_lots, missing, windows
from tests.builders import join, order
from tests.solve.recomputed import objective, size

STAGES = 8
LOT = np.full(4, 100.0)


def pool_of(seed: int, members: int = 3, **fixed: float) -> Orders:
    """One pool over eight uneven buckets: windows and quantities at random, room in every cap."""
    rng = np.random.default_rng(seed)
    volume = rng.uniform(0.5, 1.5, STAGES) / STAGES
    most = volume * 1e6 * float(rng.choice([0.2, 0.5]))
    parts = []
    for _ in range(members):
        first = int(rng.integers(STAGES - 1))
        last = int(rng.integers(first, STAGES))
        window = np.zeros(STAGES)
        window[first : last + 1] = 1.0
        cap = most * window
        quantity = 100.0 * max(1.0, np.floor(0.9 * cap.sum() / members / 100.0 * rng.uniform()))
        chosen = {"urgency": 0.3} | fixed
        parts.append(order(volume, quantity=quantity, cap=cap.tolist(), **chosen))
    together = join(parts)
    return replace(together, pools=Pools(np.zeros(members, dtype=np.int64), together.stages.layout))


def serves(orders: Orders, totals: Array) -> bool:
    """Whether totals can be divided, by maximum flow from orders to buckets (scipy)."""
    count = len(orders)
    capacity = np.zeros((count + STAGES + 2,) * 2, dtype=np.int32)
    source, sink = count + STAGES, count + STAGES + 1
    capacity[source, :count] = orders.quantity
    window = orders.cap.reshape(count, STAGES) > 0.0
    capacity[:count, count : count + STAGES] = np.where(window, orders.quantity[:, None], 0)
    capacity[count : count + STAGES, sink] = totals
    flow = maximum_flow(csr_array(capacity), source, sink).flow_value
    return bool(flow == orders.quantity.sum())


@given(st.integers(0, 10**6))
def test_spans_are_all_that_windows_need(seed: int) -> None:
    """Totals at random serve every span exactly where a maximum flow takes all orders."""
    orders = pool_of(seed)
    rng = np.random.default_rng(seed)
    used = orders.pooled.cap > 0.0
    weight = np.where(used, rng.exponential(size=STAGES) ** 2, 0.0)
    totals = np.round(orders.quantity.sum() * weight / weight.sum())
    totals[np.flatnonzero(used)[-1]] += orders.quantity.sum() - totals.sum()
    if (totals < 0.0).any():
        return
    served = not missing(windows(orders), totals).any()
    assert served == serves(orders, totals)


@given(st.integers(0, 10**6))
def test_a_divided_total_gives_every_order_its_own_within_its_window(seed: int) -> None:
    """Orders complete, trade in their windows only, and add up to the total in every bucket."""
    orders = pool_of(seed)
    layout = orders.stages.layout
    solved = solve_orders(orders)
    assert solved.converged.all()
    slices = solved.shares.reshape(len(orders), STAGES)
    assert slices.min() >= 0.0
    assert layout.sum(solved.shares) == pytest.approx(orders.quantity, rel=1e-12)
    assert not solved.shares[orders.cap == 0.0].any()
    totals = slices.sum(axis=0)
    assert (totals <= orders.pooled.cap * (1.0 + 1e-6)).all()
    again = divide(orders, totals).reshape(slices.shape)
    assert again.sum(axis=0) == pytest.approx(totals, abs=1e-6 * totals.sum())


@given(st.integers(0, 10**6))
def test_whole_lots_round_every_sum_down_or_up(seed: int) -> None:
    """Slices, bucket totals and running totals are within a lot; windows and quantities exact."""
    orders = pool_of(seed)
    ideal = solve_orders(orders).shares
    members, lots = in_lots(orders, ideal, LOT, 0)
    given_ = ideal.reshape(len(orders), STAGES)
    assert members.tolist() == [0, 1, 2]
    assert (np.mod(lots, 100.0) == 0.0).all()
    assert (lots.sum(axis=1) == orders.quantity).all()
    assert not lots[orders.cap.reshape(lots.shape) == 0.0].any()
    nearly = 100.0 + 1e-3
    for axis in (lots - given_, np.cumsum(lots - given_, axis=1)):
        assert np.abs(axis).max() < nearly
        assert np.abs(axis.sum(axis=0)).max() < nearly


@pytest.mark.parametrize("seed", [*range(12), 12161])  # the last one once went round in circles
def test_the_same_optimum_as_a_cone_programme_with_the_spans_as_rows(seed: int) -> None:
    """CVXPY and Clarabel on the total, feedback on; objectives within 1e-6."""
    orders = pool_of(seed)
    solved = solve_orders(orders)
    totals = orders.pooled
    problem = assemble(totals)
    rows = tuple(
        Row(f"span {i}", np.arange(first, last + 1), np.ones(last - first + 1), least, np.inf)
        for i, (first, last, least) in enumerate(
            zip(
                *(getattr(windows(orders), name) for name in ("first", "last", "least")),
                strict=True,
            )
        )
    )
    other = conic.solve(replace(problem, rows=rows))
    ours = solved.shares.reshape(len(orders), STAGES).sum(axis=0)
    mine = objective(problem, problem.fractions(ours))
    theirs = objective(problem, other.fractions)
    assert abs(mine - theirs) <= 1e-6 * size(problem, other.fractions)
    assert all(status is Status.PROVEN for status in solved.status)
    assert solved.gap.max() <= 1e-7


def test_windows_that_ask_nothing_change_nothing() -> None:
    """Two orders over the same window are one of their size, in proportion."""
    volume = [0.125] * STAGES
    whole = order(volume, quantity=6e4, participation=0.25, urgency=0.3)
    parts = join([order(volume, quantity=q, participation=0.25, urgency=0.3) for q in (4e4, 2e4)])
    parts = replace(parts, pools=Pools(np.zeros(2, dtype=np.int64), parts.stages.layout))
    one, two = solve_orders(whole), solve_orders(parts)
    slices = two.shares.reshape(2, STAGES)
    assert slices.sum(axis=0) == pytest.approx(one.shares, rel=1e-9)
    assert slices[0] == pytest.approx(2.0 * slices[1], rel=1e-9)
    assert two.risk_aversion == pytest.approx(np.repeat(one.risk_aversion, 2), rel=1e-9)


def test_a_ceiling_is_kept_by_the_order_it_is_of() -> None:
    """Of two orders the one with a finish time has traded so much by then; the other follows."""
    volume = [0.125] * STAGES
    ceiling = [np.inf, 4e3, *[np.inf] * 6]
    parts = join(
        [
            order(volume, quantity=2e4, ceiling=ceiling, participation=0.25),
            order(volume, quantity=2e4, participation=0.25),
        ]
    )
    parts = replace(parts, pools=Pools(np.zeros(2, dtype=np.int64), parts.stages.layout))
    slices = solve_orders(parts).shares.reshape(2, STAGES)
    assert slices[0, :2].sum() >= 1.6e4 * (1.0 - 1e-6)
    free = solve_orders(replace(parts, ceiling=np.full(2 * STAGES, np.inf)))
    assert free.shares.reshape(2, STAGES)[0, :2].sum() < 1.6e4
