"""Points times orders laid end to end, so that one batch solves them all."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from scheduler.figures import Charges
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.problem import Orders
from scheduler.solve.schedule import Progress, Solver, schedule

Number = TypeVar("Number", bound=np.generic)

UNSOLVED = "unsolved"
_NEAR = 3.0  # neighbours within a factor: a warm start then saves about a third of the steps


@dataclass(frozen=True)
class Part:
    """One book at several aims: rows are its orders, aim after aim.

    book : its orders. kept : (n,) which orders of the base they are. points : (P,) from the most
    patient aim to the most urgent. aim : (P,) values, and whether they are urgencies; None: as
    in the book.
    """

    book: Book
    kept: Index
    points: Index
    aim: Array | None
    is_urgency: bool

    @property
    def rows(self) -> int:
        return len(self.points) * len(self.kept)

    @property
    def places(self) -> Index:
        """(R,) where each row's order stands in the book."""
        return np.tile(np.arange(len(self.kept)), len(self.points))

    @property
    def stages(self) -> Index:
        """(M,) where each stage of the rows stands in the book."""
        return self.book.layout.take(self.places)[1]

    @property
    def orders(self) -> Orders:
        made = self.book.arrays.take(self.places)
        if self.aim is None:
            return made
        aim, none = np.repeat(self.aim, len(self.kept)), np.zeros(self.rows)
        return made.asking(aim, none) if self.is_urgency else made.asking(none, aim)

    @property
    def leaders(self) -> Index:
        """(R,) the row from whose solution each row starts: its own, or one near it in aim."""
        lead = np.arange(len(self.points)) if self.aim is None else _leaders(self.aim)
        rows: Index = (lead[:, None] * len(self.kept) + np.arange(len(self.kept))).ravel()
        return rows


def _leaders(aim: Array) -> Index:
    """(P,) the middle one of the neighbours within a factor of `_NEAR`, of rising aims."""
    lead = np.arange(len(aim))
    first = 0
    while first < len(aim):
        stop = max(first + 1, int(np.searchsorted(aim, aim[first] * _NEAR)))
        lead[first:stop] = (first + stop) // 2 if stop - first > 2 else lead[first:stop]
        first = stop
    return lead


@dataclass(frozen=True)
class Solved:
    """Slices of R rows over M stages, and the status of each row, to be filled in."""

    shares: Array
    status: NDArray[np.object_]

    @classmethod
    def empty(cls, rows: int, stages: int) -> Solved:
        return cls(np.zeros(stages), np.full(rows, UNSOLVED, dtype=object))


@dataclass(frozen=True)
class Stack:
    """Rows (point, order) of several parts as one batch of R orders and M stages."""

    parts: Sequence[Part]

    @cached_property
    def orders(self) -> Orders:
        return Orders.stack([part.orders for part in self.parts])

    @cached_property
    def charges(self) -> Charges:
        stages = [part.stages for part in self.parts]
        pairs = list(zip(self.parts, stages, strict=True))
        return Charges(
            np.concatenate([part.book.charges.spread[at] for part, at in pairs]),
            np.concatenate([part.book.charges.fees[at] for part, at in pairs]),
        )

    @cached_property
    def point(self) -> Index:
        """(R,)"""
        return np.concatenate([np.repeat(part.points, len(part.kept)) for part in self.parts])

    @cached_property
    def order(self) -> Index:
        """(R,) the order's place in the base."""
        return np.concatenate([np.tile(part.kept, len(part.points)) for part in self.parts])

    @cached_property
    def leaders(self) -> Index:
        """(R,) see `Part.leaders`."""
        sizes = np.cumsum([0, *(part.rows for part in self.parts)])[:-1].tolist()
        pairs = zip(self.parts, sizes, strict=True)
        return np.concatenate([part.leaders + first for part, first in pairs])

    def by_part(self, values: NDArray[Number]) -> Iterable[tuple[Part, NDArray[Number]]]:
        """Values by row, part by part."""
        cuts = np.cumsum([part.rows for part in self.parts])[:-1]
        return zip(self.parts, np.split(values, cuts), strict=True)

    def solve(self, solver: Solver, progress: Progress | None = None) -> Solved:
        """Solve every row: first the leaders, then their neighbours, starting from them."""
        layout, rows = self.orders.stages.layout, np.arange(len(self.leaders))
        solved = Solved.empty(len(rows), layout.entries)
        leads = self.leaders == rows
        done = 0

        def told(count: int, _all: int) -> None:
            if progress is not None:
                progress(done + count, len(rows))

        for chosen in (np.flatnonzero(leads), np.flatnonzero(~leads)):
            if len(chosen):
                start = solved.shares[layout.take(self.leaders[chosen])[1]] if done else None
                part = self.orders.take(chosen)
                found = schedule(part, start=start, certify=False, solver=solver, progress=told)
                solved.shares[layout.take(chosen)[1]] = found.shares
                solved.status[chosen] = [status.name.lower() for status in found.status]
                solved.status[chosen[~found.converged]] = UNSOLVED
                done += len(chosen)
        return solved
