"""Orders of different lengths laid end to end in one flat array.

Every array of the model is flat: entry m belongs to order `owner[m]`, and the entries of one
order are neighbours in time order. Sums, recursions and look-ups over orders of any lengths
are then single array operations, for one order and for ten thousand alike.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

_FEW = 400

Array = NDArray[np.float64]
Index = NDArray[np.int64]


@dataclass(frozen=True)
class Ragged:
    """The layout: `size[i]` >= 1 entries for order i."""

    size: Index

    @cached_property
    def first(self) -> Index:
        """Position of each order's first entry."""
        return np.concatenate(([0], np.cumsum(self.size)[:-1]))

    @cached_property
    def last(self) -> Index:
        """Position of each order's last entry."""
        return np.cumsum(self.size) - 1

    @cached_property
    def owner(self) -> Index:
        """The order each entry belongs to."""
        return np.repeat(np.arange(len(self.size)), self.size)

    @cached_property
    def entries(self) -> int:
        return int(self.size.sum())

    def sum(self, values: Array) -> Array:
        """Sum of each order's entries (last axis)."""
        return np.add.reduceat(values, self.first, axis=-1)

    def max(self, values: Array) -> Array:
        """Largest of each order's entries (last axis)."""
        return np.maximum.reduceat(values, self.first, axis=-1)

    def min(self, values: Array) -> Array:
        """Smallest of each order's entries (last axis)."""
        return np.minimum.reduceat(values, self.first, axis=-1)

    def before(self, after: Array, initial: Array) -> Array:
        """State before each entry, from the state after each and each order's initial one."""
        shifted = np.empty_like(after)
        shifted[1:] = after[:-1]
        shifted[self.first] = initial
        return shifted

    @cached_property
    def even(self) -> bool:
        """Whether all orders have equally many entries."""
        return bool((self.size == self.size[0]).all())

    def cumsum(self, values: Array) -> Array:
        """Running total within each order."""
        if self.even:
            return values.reshape(len(self.size), -1).cumsum(axis=1).ravel()
        return self.scan(np.ones_like(values), values, np.zeros(len(self.size)))

    def reverse_cumsum(self, values: Array) -> Array:
        """Total of each entry and those after it within its order."""
        if self.even:
            return values.reshape(len(self.size), -1)[:, ::-1].cumsum(axis=1)[:, ::-1].ravel()
        return self.reverse_scan(np.ones_like(values), values)

    def scan(self, decay: Array, inflow: Array, initial: Array) -> Array:
        """Solve e_t = decay_t e_{t-1} + inflow_t within each order, e before its first = initial.

        Affine maps compose associatively, so log2(longest order) doubling passes do it. Every
        term stays a product of decays, so nothing overflows and positive terms never cancel.
        """
        if self.entries <= _FEW:
            return self._scan_one_by_one(decay, inflow, initial)
        gain = decay.copy()
        state = inflow.copy()
        state[self.first] += gain[self.first] * initial
        gain[self.first] = 0.0
        step = 1
        while step < self.size.max():
            state[step:] = state[step:] + gain[step:] * state[:-step]
            gain[step:] = gain[step:] * gain[:-step]
            step *= 2
        return state

    def _scan_one_by_one(self, decay: Array, inflow: Array, initial: Array) -> Array:
        """`scan` as a loop over numbers: with few entries, that beats passes over arrays."""
        gains, flows = decay.tolist(), inflow.tolist()
        at, result = 0, []
        for size, state in zip(self.size.tolist(), initial.tolist(), strict=True):
            for _ in range(size):
                state = gains[at] * state + flows[at]  # noqa: PLW2901
                result.append(state)
                at += 1
        return np.array(result)

    def reverse_scan(self, decay: Array, inflow: Array) -> Array:
        """Solve l_t = inflow_t + decay_{t+1} l_{t+1} within each order, 0 after its last."""
        gain = np.empty_like(decay)
        gain[:-1] = decay[1:]
        gain[self.last] = 0.0
        if self.entries <= _FEW:
            backward = Ragged(self.size[::-1])
            zero = np.zeros(len(self.size))
            return backward._scan_one_by_one(gain[::-1], inflow[::-1], zero)[::-1]
        state = inflow.copy()
        step = 1
        while step < self.size.max():
            state[:-step] = state[:-step] + gain[:-step] * state[step:]
            gain[:-step] = gain[:-step] * gain[step:]
            step *= 2
        return state

    def take(self, orders: Index) -> tuple[Ragged, Index]:
        """The layout of some of the orders, and where their entries stand in this one."""
        part = Ragged(self.size[orders])
        offset = np.arange(part.entries) - part.first[part.owner]
        return part, self.first[orders][part.owner] + offset
