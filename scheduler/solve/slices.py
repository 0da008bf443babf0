"""Slices that can be sent: solved, freed of slices too small to trade, in whole lots."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.model.impact import impact_cost
from scheduler.model.ragged import Array
from scheduler.model.risk import variance
from scheduler.problem import Orders
from scheduler.solve import interior
from scheduler.solve.lots import round_to_lots
from scheduler.solve.pooled import solve_orders
from scheduler.solve.schedule import Progress, Schedule, Solver, Status, schedule
from scheduler.solve.windows import in_lots


@dataclass(frozen=True)
class Sliced:
    """shares : (M,) whole lots. schedule : what they were rounded from. notes : (order, text)."""

    shares: Array
    schedule: Schedule
    notes: tuple[tuple[int, str], ...]


def slice_orders(
    orders: Orders,
    lot: Array,
    min_slice: Array,
    solver: Solver = interior.solve,
    *,
    start: Array | None = None,
    progress: Progress | None = None,
) -> Sliced:
    """Solve, and round so that every slice is whole lots and 0 or at least `min_slice`.

    Where slices are too small, the smallest of each such order is dropped and the rest solved
    again, until none is left or the caps leave no choice; an order's last slice may be smaller.
    Such schedules are the best found, not proven.

    Parameters
    ----------
    lot, min_slice : (N,) shares.
    start : (M,) earlier slices, for warm starts.
    """
    solved = solve_orders(orders, start=start, solver=solver, progress=progress)
    shares = rounded(orders, solved.shares, lot)
    asked = orders
    thinned = np.flatnonzero(_has_small(orders, shares, min_slice))
    if len(thinned):
        best = _thinned(orders.take(thinned), lot[thinned], min_slice[thinned], solver)
        _, at = orders.stages.layout.take(thinned)
        asked = replace(orders, cap=orders.cap.copy())
        shares[at], solved.shares[at], asked.cap[at] = best.shares, best.solved, best.cap
        for order in thinned:
            solved.status[order] = Status.LOCAL  # of the buckets kept; the choice is a search
        solved.converged[thinned] &= best.converged
    return Sliced(shares, solved, tuple(notes_on_lots(orders, asked, shares, lot, min_slice)))


@dataclass(frozen=True)
class _Thinned:
    """Slices of orders with buckets dropped.

    (M,) shares, what they were rounded from, caps; (N,) objective, and whether all slices but the
    last are large enough.
    """

    shares: Array
    solved: Array
    cap: Array
    converged: NDArray[np.bool_]
    value: Array
    keeps: NDArray[np.bool_]


def _thinned(orders: Orders, lot: Array, min_slice: Array, solver: Solver) -> _Thinned:
    """The best found by dropping small slices, over the whole window and over its early parts.

    Which buckets to use is a combinatorial choice; dropping the smallest alone drifts to large late
    auctions, so windows cut after 1, 2, 4, ... buckets are tried as well.
    """
    best = _drop(orders, lot, min_slice, solver)
    layout = orders.stages.layout
    rank = layout.cumsum(np.where(orders.cap > 0.0, 1.0, 0.0))
    quantity = orders.quantity
    for buckets in 2 ** np.arange(int(np.log2(rank.max())) + 1):
        cap = np.where(rank <= buckets, orders.cap, 0.0)
        room = layout.sum(np.minimum(cap, quantity[layout.owner]))
        tried = np.flatnonzero(room >= quantity * (1.0 + 1e-9))
        if not len(tried):
            continue
        _, at = layout.take(tried)
        part = replace(orders.take(tried), cap=cap[at])
        rival = _drop(part, lot[tried], min_slice[tried], solver)
        sound = rival.converged & rival.keeps
        better = sound & ((rival.value < best.value[tried]) | ~best.keeps[tried])
        taken = at[better[part.stages.layout.owner]]
        mine = better[part.stages.layout.owner]
        for name in ("shares", "solved", "cap"):
            getattr(best, name)[taken] = getattr(rival, name)[mine]
        best.value[tried[better]], best.keeps[tried[better]] = rival.value[better], True
    return best


def _drop(orders: Orders, lot: Array, min_slice: Array, solver: Solver) -> _Thinned:
    """Drop the smallest too small slice of each order and solve again, until none is left."""
    asked = orders
    solved = schedule(asked, certify=False, solver=solver)
    shares = rounded(asked, solved.shares, lot)
    while len(drop := _droppable(asked, shares, min_slice)):
        cap = asked.cap.copy()
        cap[drop] = 0.0
        asked = replace(asked, cap=cap)
        solved = schedule(asked, start=solved.shares, certify=False, solver=solver)
        shares = rounded(asked, solved.shares, lot)
    layout = orders.stages.layout
    position = np.where(shares > 0.0, np.arange(len(shares)), -1)
    others = shares.copy()
    others[layout.max(position.astype(float)).astype(np.int64)] = 0.0  # the last may be small
    return _Thinned(
        shares,
        solved.shares,
        asked.cap.copy(),
        solved.converged,
        _objective(orders, shares),
        np.logical_not(_has_small(orders, others, min_slice)),
    )


def _has_small(orders: Orders, shares: Array, min_slice: Array) -> NDArray[np.bool_]:
    """Whether an order has a slice below its min_slice, its last one included."""
    layout = orders.stages.layout
    below = (shares > 0.0) & (shares < min_slice[layout.owner] * (1.0 - 1e-12))
    result: NDArray[np.bool_] = layout.sum(np.where(below, 1.0, 0.0)) > 0.0
    return result


def _objective(orders: Orders, shares: Array) -> Array:
    """C + U sqrt(Var) + lambda Var of slices, (N,) currency."""
    layout = orders.stages.layout
    cost = impact_cost(orders.stages, orders.market, shares, orders.initial)
    base, own = variance(orders.stages, orders.market, orders.quantity, shares, orders.initial)
    risk = layout.sum(base + own)
    total = layout.sum(cost + orders.charge * shares)
    result: Array = total + orders.urgency * np.sqrt(risk) + orders.risk_aversion * risk
    return result


def rounded(orders: Orders, shares: Array, lot: Array) -> Array:
    """Slices in whole lots, within the caps, windows and ceilings of the orders."""
    layout = orders.stages.layout
    ceiling = np.minimum(orders.ceiling, orders.quantity[layout.owner])
    floor = np.maximum(orders.quantity[layout.owner] - ceiling, 0.0)
    result = round_to_lots(layout, shares, orders.quantity, orders.cap, floor, lot)
    if orders.pools is not None:
        for pool in np.flatnonzero(orders.pools.count > 1).tolist():
            members, slices = in_lots(orders, shares, lot, pool)
            result[layout.first[members][:, None] + np.arange(slices.shape[1])] = slices
    return result


def _droppable(orders: Orders, shares: Array, min_slice: Array) -> Array:
    """The smallest too small slice of each order that can do without it."""
    layout, owner = orders.stages.layout, orders.stages.layout.owner
    position = np.where(shares > 0.0, np.arange(len(shares)), -1)
    last = layout.max(position.astype(float)).astype(np.int64)
    small = (shares > 0.0) & (shares < min_slice[owner] * (1.0 - 1e-12))
    small[last[last >= 0]] = False
    small &= _can_do_without(orders)
    size = np.where(small, shares, np.inf)
    least = layout.min(size)
    first = layout.min(np.where(size == least[owner], np.arange(len(shares)), np.inf))
    result: Array = first[np.isfinite(least)].astype(np.int64)
    return result


def _can_do_without(orders: Orders) -> NDArray[np.bool_]:
    """Whether an order could still keep its ceilings, and complete, without a stage, (M,)."""
    layout, owner = orders.stages.layout, orders.stages.layout.owner
    quantity = orders.quantity[owner]
    cap = np.minimum(orders.cap, quantity)
    left = orders.ceiling.copy()
    left[layout.last] = 0.0
    spare = layout.cumsum(cap) - (quantity - left)
    step = 1
    while step < layout.size.max():  # the least spare at the stage or later in its order
        later = np.where(owner[step:] == owner[:-step], spare[step:], np.inf)
        spare[:-step] = np.minimum(spare[:-step], later)
        step *= 2
    result: NDArray[np.bool_] = spare >= cap
    return result


def notes_on_lots(
    orders: Orders, asked: Orders, shares: Array, lot: Array, min_slice: Array
) -> list[tuple[int, str]]:
    """(order, text) of dropped buckets, slices that stay small, and odd lots."""
    layout, owner = orders.stages.layout, orders.stages.layout.owner
    dropped = layout.sum(np.where((asked.cap == 0.0) & (orders.cap > 0.0), 1.0, 0.0))
    below = (shares > 0.0) & (shares < min_slice[owner] * (1.0 - 1e-12))
    small = layout.sum(np.where(below, 1.0, 0.0))
    odd = np.mod(layout.sum(shares) + 1e-9 * lot, lot)
    odd = np.where(odd > 1e-6 * lot, odd, 0.0)
    words = (
        (dropped, "{:.0f} bucket(s) dropped to keep min_slice"),
        (small, "{:.0f} slice(s) stay below min_slice"),
        (odd, "{:g} shares beyond whole lots ride on the last slice"),
    )
    return [
        (int(order), text.format(values[order]))
        for values, text in words
        for order in np.flatnonzero(values)
    ]
