"""Slices that can be sent: solved, freed of slices too small to trade, in whole lots."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array
from scheduler.problem import Orders
from scheduler.solve import interior
from scheduler.solve.lots import round_to_lots
from scheduler.solve.schedule import Progress, Schedule, Solver, schedule


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

    Parameters
    ----------
    lot, min_slice : (N,) shares.
    start : (M,) earlier slices, for warm starts.
    """
    solved = schedule(orders, start=start, solver=solver, progress=progress)
    shares = rounded(orders, solved.shares, lot)
    asked = orders
    while len(drop := _droppable(asked, shares, min_slice)):
        cap = asked.cap.copy()
        cap[drop] = 0.0
        asked = replace(asked, cap=cap)
        solved = schedule(asked, start=solved.shares, solver=solver)
        shares = rounded(asked, solved.shares, lot)
    return Sliced(shares, solved, tuple(notes_on_lots(orders, asked, shares, lot, min_slice)))


def rounded(orders: Orders, shares: Array, lot: Array) -> Array:
    """Slices in whole lots, within the caps and ceilings of the orders."""
    layout = orders.stages.layout
    ceiling = np.minimum(orders.ceiling, orders.quantity[layout.owner])
    floor = np.maximum(orders.quantity[layout.owner] - ceiling, 0.0)
    return round_to_lots(layout, shares, orders.quantity, orders.cap, floor, lot)


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
