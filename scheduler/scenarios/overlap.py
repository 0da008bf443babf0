"""A schedule carried from one grid of buckets to another."""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array
from scheduler.sessions import Grid


def carried(shares: Array, old: Grid, new: Grid) -> Array:
    """(M_new,) what a schedule on the old grid trades within each bucket of the new one.

    A bucket's slice is spread over its own time as the new grid spreads volume, so that it keeps
    its participation; what falls outside the new window is left out. Auctions match auctions at
    the same instant.
    """
    if new is old:
        return shares
    result = np.zeros(len(new))
    begin, end = (new.start.astype(np.int64), new.end.astype(np.int64))
    for slice_, start, stop, auction, trading in zip(
        shares.tolist(),
        old.start.astype(np.int64).tolist(),
        old.end.astype(np.int64).tolist(),
        old.auction.tolist(),
        old.open.tolist(),
        strict=True,
    ):
        if not trading or slice_ == 0.0:
            continue
        alike = new.auction if auction else (new.open & ~new.auction)
        if start == stop:
            result += np.where(alike & (begin == start) & (end == stop), slice_, 0.0)
            continue
        common = np.maximum(np.minimum(end, stop) - np.maximum(begin, start), 0)
        common = np.where(alike, common, 0).astype(float)
        volume = new.volume * common / np.maximum(end - begin, 1)
        weight = volume if volume.sum() > 0.0 else common
        if common.any():
            result += slice_ * (common.sum() / (stop - start)) * weight / weight.sum()
    return result
