"""Whole lots: the cumulative schedule rounded, never the slices one by one.

Rounding what has been traded so far, not each slice, keeps every slice within a lot of its plan
and the total exact. A slice may exceed its cap by less than one lot if cap left unused before it
covers that; trading floor(cumulative) always satisfies this, so every feasible plan has a feasible
rounding. Where that does not ask for more, only the cap unused since the previous slice counts,
and within that room the cumulative schedule is rounded to the nearest lot.
"""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array, Ragged

_SURE = 1e-9  # of a lot: below this a cumulative schedule counts as having reached the lot


def round_to_lots(
    layout: Ragged, shares: Array, quantity: Array, cap: Array, floor: Array, lot: Array
) -> Array:
    """Slices in whole lots that add up to each order's quantity exactly.

    Parameters
    ----------
    layout : stages of N orders laid end to end, M in all.
    shares : (M,) slices.
    quantity : (N,) what is to be traded; slices that fall short of it are rounded down.
    cap : (M,) most shares of each stage.
    floor : (M,) least shares to have traded after each stage (what a ceiling asks).
    lot : (N,) lot sizes. What a quantity has beyond whole lots rides on its last slice.

    Returns
    -------
    (M,) slices, each a whole number of lots but for an order's last one.
    """
    traded = layout.sum(shares)
    complete = traded > quantity * (1.0 - 1e-9)
    total = np.where(complete, quantity, traded)
    lot = np.minimum(lot, quantity)  # an order below one lot is one slice
    lots = np.floor(total / lot + _SURE)
    part = lots * lot / np.where(total > 0.0, total, 1.0)
    planned = layout.cumsum(shares) / lot[layout.owner]
    sure = np.floor(np.minimum(planned, lots[layout.owner]) + _SURE)
    wanted = np.floor(planned * part[layout.owner] + 0.5)
    least = np.minimum(np.ceil(floor / lot[layout.owner] - _SURE), lots[layout.owner])
    goal = np.maximum(wanted, least)
    counts = _walk(layout, goal, sure, cap / lot[layout.owner], lots)
    result = counts * lot[layout.owner]
    _add_remainder(layout, result, counts, np.where(complete, total - lots * lot, 0.0))
    return result


def _walk(layout: Ragged, wanted: Array, sure: Array, cap: Array, lots: Array) -> Array:
    """Lots of each stage, one stage of every order at a time; `sure` are to be had in any case."""
    counts = np.zeros(len(wanted))
    traded, unused = np.zeros(len(lots)), np.zeros(len(lots))
    for step in range(int(layout.size.max())):
        orders = np.flatnonzero(layout.size > step)
        at = layout.first[orders] + step
        room = np.floor(cap[at] + np.minimum(unused[orders], 1.0 - _SURE) + _SURE)
        goal = np.minimum(wanted[at], traded[orders] + np.where(cap[at] > 0.0, room, 0.0))
        goal = np.minimum(np.maximum(goal, np.maximum(sure[at], traded[orders])), lots[orders])
        counts[at] = goal - traded[orders]
        unused[orders] = np.where(counts[at] > 0.0, 0.0, unused[orders] + cap[at])
        traded[orders] = goal
    return counts


def _add_remainder(layout: Ragged, result: Array, counts: Array, remainder: Array) -> None:
    """Put what whole lots leave over on each order's last slice."""
    position = np.where(counts > 0.0, np.arange(len(counts)), -1)
    last = layout.max(position.astype(float)).astype(np.int64)
    has = (remainder > 0.0) & (last >= 0)
    result[last[has]] += remainder[has]
