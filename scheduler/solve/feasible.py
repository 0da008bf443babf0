"""Can an order be completed under its caps and ceilings, and how much at most?

Trading as early as the caps allow leaves the least at every stage, so it is feasible exactly when
that schedule keeps every ceiling and completes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array, Index
from scheduler.problem import Orders

_ROUNDING = 1e-12


@dataclass(frozen=True)
class Reach:
    """What the caps allow, by order.

    most : (N,) shares that can be traded; may exceed the quantity.
    late : (N,) the first stage, from 0 within the order, whose ceiling cannot be kept, or -1.
    least_left : (N,) shares left there at best.
    """

    most: Array
    late: Index
    least_left: Array


def reach(orders: Orders) -> Reach:
    """The most each order can trade, and the first ceiling it cannot keep."""
    layout = orders.stages.layout
    traded = layout.cumsum(np.minimum(orders.cap, orders.quantity[layout.owner]))
    left = np.maximum(orders.quantity[layout.owner] - traded, 0.0)
    slack = _ROUNDING * orders.quantity[layout.owner]
    late = np.where(left > orders.ceiling + slack, np.arange(layout.entries), layout.entries)
    first = layout.min(late.astype(float)).astype(np.int64)
    fails = first < layout.entries
    at = np.where(fails, first, layout.last)
    return Reach(
        layout.sum(np.minimum(orders.cap, orders.quantity[layout.owner])),
        np.where(fails, at - layout.first, -1),
        left[at],
    )


def forced_shares(orders: Orders) -> tuple[Array, NDArray[np.bool_]]:
    """Slices of orders that have no choice, and which orders those are.

    An order has none if its caps add up to no more than its quantity (all of them are used; the
    rest stays), or if only one bucket can trade.
    """
    layout, owner = orders.stages.layout, orders.stages.layout.owner
    cap = np.minimum(orders.cap, orders.quantity[owner])
    total = layout.sum(cap)
    full = total <= orders.quantity * (1.0 + _ROUNDING)
    single = layout.sum((cap > 0.0).astype(float)) == 1.0
    known = full | single
    return np.where(known[owner], cap, 0.0), known
