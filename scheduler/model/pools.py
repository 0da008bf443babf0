"""Orders that share one impact state: those of one symbol and side are one pool.

The market sees what they trade together. All orders of a pool have the same stages, so a pool's
totals are sums over them, stage by stage.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array, Index, Ragged


@dataclass(frozen=True)
class Pools:
    """P pools of N orders.

    of : (N,) pool of each order, numbered from 0 in the order of their first members.
    members : the stages of the orders, M in all; equally many within a pool.
    """

    of: Index
    members: Ragged

    @cached_property
    def lead(self) -> Index:
        """(P,) first order of each pool."""
        return np.unique(self.of, return_index=True)[1].astype(np.int64)

    @cached_property
    def layout(self) -> Ragged:
        """The stages of the pools."""
        return Ragged(self.members.size[self.lead])

    @cached_property
    def lead_stages(self) -> Index:
        """Positions of the lead orders' stages, one for each stage of the pools."""
        return self.members.take(self.lead)[1]

    @cached_property
    def place(self) -> Index:
        """(M,) each order's stages among those of the pools."""
        owner = self.members.owner
        offset = np.arange(self.members.entries) - self.members.first[owner]
        result: Index = self.layout.first[self.of[owner]] + offset
        return result

    @cached_property
    def count(self) -> Index:
        """(P,) orders in each pool."""
        return np.bincount(self.of)

    @cached_property
    def joined(self) -> NDArray[np.bool_]:
        """(N,) whether an order is not alone in its pool."""
        result: NDArray[np.bool_] = self.count[self.of] > 1
        return result

    def by_stage(self, values: Array) -> Array:
        """Totals of (M,) values at each stage of the pools."""
        return np.bincount(self.place, values, minlength=self.layout.entries).astype(float)

    def by_pool(self, values: Array) -> Array:
        """(P,) totals of (N,) values."""
        return np.bincount(self.of, values, minlength=len(self.lead)).astype(float)

    def most_by_stage(self, values: Array) -> Array:
        """Largest of (M,) values of at least 0 at each stage of the pools."""
        result = np.zeros(self.layout.entries)
        np.maximum.at(result, self.place, values)
        return result
