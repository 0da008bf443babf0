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
from scheduler.scenarios.points import Taken
from scheduler.solve.schedule import Progress, Solver, schedule

Number = TypeVar("Number", bound=np.generic)

UNSOLVED = "unsolved"
_NEAR = 3.0  # neighbours within a factor: a warm start then saves about a third of the steps


@dataclass(frozen=True)
class Part:
    """Rows (point, order) out of one book.

    place : (R,) where each row's order stands in the book. point, order : (R,) whose row it is.
    aim : (R,) its urgency or risk aversion; None: as in the book. leader : (R,) the row from whose
    solution it starts: its own, or one near it in aim.
    """

    book: Book
    place: Index
    point: Index
    order: Index
    aim: Array | None
    is_urgency: bool
    leader: Index

    @cached_property
    def stages(self) -> Index:
        """(M,) where each stage of the rows stands in the book."""
        return self.book.layout.take(self.place)[1]

    @property
    def orders(self) -> Orders:
        made = self.book.arrays.take(self.place)
        if self.aim is None:
            return made
        none = np.zeros(len(self.aim))
        return made.asking(self.aim, none) if self.is_urgency else made.asking(none, self.aim)


@dataclass(frozen=True)
class Asked:
    """Points that share everything but the aim.

    points : (P,) their names. aim : (P,) rising; None: the book's own, of a single point.
    """

    points: Index
    aim: Array | None


def part_of(taken: Taken, asked: Sequence[Asked], *, is_urgency: bool) -> Part:
    """The rows of a book at all the aims that are asked of each of its points."""
    place, point, aim, leader = [], [], [], []
    first = 0
    for which in np.unique(taken.point[taken.good]).tolist():
        group = asked[which]
        mine = np.flatnonzero(taken.good & (taken.point == which))
        count = len(group.points)
        lead = np.arange(count) if group.aim is None else _leaders(group.aim)
        place.append(np.tile(mine, count))
        point.append(np.repeat(group.points, len(mine)))
        aim.append(np.repeat(np.zeros(count) if group.aim is None else group.aim, len(mine)))
        leader.append(first + (lead[:, None] * len(mine) + np.arange(len(mine))).ravel())
        first += count * len(mine)
    places = np.concatenate(place)
    aims = None if asked[0].aim is None else np.concatenate(aim)
    return Part(
        taken.book,
        places,
        np.concatenate(point),
        taken.order[places],
        aims,
        is_urgency,
        np.concatenate(leader),
    )


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
        charges = [(part.book.charges, part.stages) for part in self.parts]
        return Charges(
            np.concatenate([of.spread[at] for of, at in charges]),
            np.concatenate([of.fees[at] for of, at in charges]),
        )

    @cached_property
    def point(self) -> Index:
        """(R,)"""
        return np.concatenate([part.point for part in self.parts])

    @cached_property
    def order(self) -> Index:
        """(R,) the order's place in the base."""
        return np.concatenate([part.order for part in self.parts])

    @cached_property
    def leaders(self) -> Index:
        """(R,) the row from whose solution each row starts."""
        sizes = np.cumsum([0, *(len(part.place) for part in self.parts)])[:-1].tolist()
        pairs = zip(self.parts, sizes, strict=True)
        return np.concatenate([part.leader + first for part, first in pairs])

    def by_part(self, values: NDArray[Number]) -> Iterable[tuple[Part, NDArray[Number]]]:
        """Values by row, part by part."""
        cuts = np.cumsum([len(part.place) for part in self.parts])[:-1]
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
