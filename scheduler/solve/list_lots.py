"""Whole lots that keep corridors: each name's cumulative schedule stays at the lot below or above.

Rounding every name to its nearest lot moves a list's balances at random. Where that breaks a
corridor, names at a bucket's end are moved to the other neighbouring lot, those that lose least by
it first, until the corridor holds. Any one move is worth a lot, so a single corridor is missed by
less than the largest lot's value; with several, what is left is reported.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array, Ragged

_SURE = 1e-9


def keep_corridors(
    layout: Ragged,
    coupling: Coupling,
    wanted: Array,
    rounded: Array,
    cap: Array,
    quantity: Array,
    lot: Array,
    *,
    least: Array,
    movable: NDArray[np.bool_],
) -> Array:
    """Slices moved by lots so that the corridors hold.

    Parameters
    ----------
    layout : free buckets of N names, M in all.
    wanted, rounded : (M,) slices before and after rounding, shares. cap : (M,) shares.
    quantity, lot : (N,) shares.
    least : (M,) shares to have traded after each bucket. movable : (N,) whose lots may move.
    """
    ideal, total = layout.cumsum(wanted), layout.cumsum(rounded)
    size = lot[layout.owner]
    low, high = np.floor(ideal / size + _SURE) * size, np.ceil(ideal / size - _SURE) * size
    rows, ends = coupling.limited
    for row, interval in sorted(zip(rows, ends, strict=True), key=lambda pair: int(pair[1])):
        at = coupling.bucket[:, interval]
        ready = np.flatnonzero((at >= 0) & (coupling.end[:, interval] >= 1.0))
        ready = ready[(at[ready] != layout.last[ready]) & movable[ready]]
        level = _level(coupling, layout, total, quantity, int(row), int(interval))
        for side, bound in ((1.0, coupling.upper), (-1.0, coupling.lower)):
            excess = side * (level - bound[row, interval])
            if excess > 0.0 and len(ready):
                bucket = at[ready]
                effect = coupling.rows[row, ready] * lot[ready] / quantity[ready] * side
                other = np.where(effect > 0.0, high[bucket], low[bucket])
                moves = _lawful(layout, total, bucket, other, cap, size)
                moves &= (other != total[bucket]) & (other >= least[bucket])
                step = np.abs(effect) * np.abs(other - total[bucket]) / lot[ready]
                loss = np.where(moves, np.abs(other - ideal[bucket]) / lot[ready], np.inf)
                order = np.argsort(loss)
                gained = np.cumsum(np.where(moves[order], step[order], 0.0))
                enough = int(np.searchsorted(gained, excess)) + 1
                chosen = order[:enough][moves[order[:enough]]]
                total[bucket[chosen]] = other[chosen]
    return total - layout.before(total, np.zeros(len(quantity)))


def _lawful(
    layout: Ragged, total: Array, bucket: Array, other: Array, cap: Array, lot: Array
) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Moves that keep every slice at least 0 and within its cap and a lot."""
    before = np.where(np.isin(bucket, layout.first), 0.0, total[bucket - 1])
    after = total[bucket + 1]
    allowed = other >= before
    allowed &= other <= after
    allowed &= other - before < cap[bucket] + lot[bucket]
    allowed &= after - other < cap[bucket + 1] + lot[bucket]
    result: np.ndarray[tuple[int], np.dtype[np.bool_]] = allowed
    return result


def _level(
    coupling: Coupling, layout: Ragged, total: Array, quantity: Array, row: int, interval: int
) -> float:
    """One corridor at the end of one interval, from cumulative shares."""
    bucket, share = coupling.at[:, interval], coupling.end[:, interval]
    before = np.where(bucket == layout.first, 0.0, total[bucket - 1])
    done = (before + share * (total[bucket] - before)) / quantity
    left = (1.0 - done) * coupling.inside[:, interval] + coupling.untouched[:, interval]
    return float(coupling.rows[row] @ left + coupling.constant[row])
