"""Solving a grid chunk by chunk: which points go together, their schedules, regret and excess."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import pandas as pd

from scheduler.errors import NotConvergedError
from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.limits import check_feasible
from scheduler.model.ragged import Array, Index
from scheduler.problem import Orders
from scheduler.rivals import following
from scheduler.scenarios.axes import AIMS, Grid, Value
from scheduler.scenarios.overlap import carried
from scheduler.scenarios.points import Recipe, Taken
from scheduler.scenarios.rows import all_rows, scenario_rows
from scheduler.scenarios.stack import UNSOLVED, Asked, Part, Solved, Stack, part_of
from scheduler.sessions import Grid as Buckets
from scheduler.solve.schedule import Progress, Solver, schedule

_CHUNK = 120_000  # stages solved together: some seconds, and little memory
_WITHIN = 1e-6  # of the quantity: as near as a solver comes to a cap
_LATE = 1e-9


@dataclass(frozen=True)
class Study:
    """A grid over a recipe. `solver` solves, as in `plan`."""

    recipe: Recipe
    grid: Grid
    solver: Solver

    @cached_property
    def base(self) -> Book:
        """The orders as tables and settings have them.

        Raises:
            InputError, InfeasibleError: what a plan would be refused for, too.
        """
        book = self.recipe.base()
        check_feasible(book)
        return book

    @cached_property
    def base_shares(self) -> Array:
        """(M,) the base's slices.

        Raises:
            NotConvergedError: the solver stopped short of its tolerance.
        """
        solved = self._stack([{}], np.array([0])).solve(self.solver)
        unsolved = np.flatnonzero(solved.status == UNSOLVED)
        if len(unsolved):
            names = ", ".join(self.base.names[i] for i in unsolved[:20].tolist())
            raise NotConvergedError(f"no schedule found to tolerance for order {names} of the base")
        return solved.shares

    @cached_property
    def chunks(self) -> list[Index]:
        """The points of each chunk: the base alone, then worlds fastest and aims next."""
        points = np.arange(1, len(self.grid) + 1)
        places = self.grid.places(points)
        rest = [name for name in self.grid.choices if name not in AIMS]
        aims = [self.grid.aim] if self.grid.aim else []
        order = np.lexsort([places[name] for name in (*self.grid.worlds[::-1], *aims, *rest)])
        finest = min((float(value) for value in self.grid.axes.get("bucket", ())), default=np.inf)
        finer = max(1.0, self.recipe.settings.plan.bucket / finest)
        each = max(1, int(_CHUNK / (finer * self.base.layout.entries)))
        return [np.array([0]), *np.split(points[order], np.arange(each, len(points), each))]

    def rows(self, points: Index, progress: Progress | None = None) -> pd.DataFrame:
        """The rows of some points: all their orders, in the base's order."""
        values = [self.grid.at(point) for point in points.tolist()]
        stack = self._stack(values, points)
        found = None
        if stack.parts:
            solved = stack.solve(self.solver, progress)
            regret = self._regret(stack, solved)
            excess = np.concatenate([self._excess(part) for part in stack.parts])
            found = scenario_rows(stack, solved, regret=regret, excess=excess)
        return all_rows(found, points, self.grid, self.base)

    def shares(self, point: int, order: int) -> tuple[Buckets, Array] | None:
        """The buckets and slices of one order at a point, solved anew; None if infeasible."""
        found = self.alone(point, order)
        if found is None:
            return None
        buckets, task = found
        return buckets, schedule(task, certify=False, solver=self.solver).shares

    def alone(self, point: int, order: int) -> tuple[Buckets, Orders] | None:
        """The buckets of one order at a point, and its task; None if infeasible."""
        stack = self._stack([self.grid.at(point)], np.array([point]))
        if not stack.parts or order not in stack.order:
            return None
        row, part = np.flatnonzero(stack.order == order), stack.parts[0]
        return part.book.grids[int(part.place[row[0]])], stack.orders.take(row)

    def _stack(self, values: list[dict[str, Value]], points: Index) -> Stack:
        """Points by their values; those that share everything but the aim share their orders."""
        aim = self.grid.aim
        groups: dict[tuple[Value, ...], list[int]] = {}
        for i, value in enumerate(values):
            key = tuple(value[name] for name in value if name != aim)
            groups.setdefault(key, []).append(i)
        asked = [self._asked([values[i] for i in m], points[m]) for m in groups.values()]
        firsts = [values[members[0]] for members in groups.values()]
        others = [{name: v for name, v in value.items() if name != aim} for value in firsts]
        found = self.recipe.books(others) if any(others) else [self._whole]
        urgent = aim == "urgency"
        return Stack([part_of(t, asked, is_urgency=urgent) for t in found if t.good.any()])

    @property
    def _whole(self) -> Taken:
        """The base as it is."""
        count = len(self.base.names)
        everything = np.ones(count, dtype=np.bool_)
        return Taken(self.base, np.zeros(count, dtype=np.int64), np.arange(count), everything)

    def _asked(self, values: list[dict[str, Value]], points: Index) -> Asked:
        """The aims of points that share everything else."""
        aim = self.grid.aim
        if aim is None or aim not in values[0]:
            return Asked(points, None)
        wanted = np.array([float(value[aim]) for value in values])
        rising = np.argsort(wanted, kind="stable")
        return Asked(points[rising], wanted[rising])

    def _regret(self, stack: Stack, solved: Solved) -> Array:
        """(R,) what each row's schedule of the base world loses in the row's own world.

        The schedule with the row's choices in the base world is moved within the row's caps
        (`rivals.following`); its objective less the best found. Where it is the better one, the
        solver stopped in another minimum, or at its tolerance: the row takes it over.
        """
        if not self.grid.worlds:
            return np.full(len(stack.point), np.nan)
        pattern, rows = self._base_world(stack)
        if not len(rows):
            return np.full(len(stack.point), np.nan)
        layout = stack.orders.stages.layout
        _, at = layout.take(rows)
        orders = stack.orders.take(rows)
        charges = replace(
            stack.charges, spread=stack.charges.spread[at], fees=stack.charges.fees[at]
        )
        moved = following(orders, pattern)
        lost = Figures(orders, charges, moved).objective
        own = Figures(orders, charges, solved.shares[at]).objective
        kept = _keeps_ceilings(orders, moved)
        better = kept & (lost < own)
        solved.shares[at] = np.where(better[orders.stages.layout.owner], moved, solved.shares[at])
        regret = np.full(len(stack.point), np.nan)
        regret[rows] = np.where(kept, np.maximum(lost - own, 0.0), np.nan)
        regret[stack.point == 0] = 0.0  # the base against itself, whatever the last digit says
        return regret

    def _base_world(self, stack: Stack) -> tuple[Array, Index]:
        """The slices, in the base world, of rows with their choices; and which rows those are."""
        points, where = np.unique(stack.point, return_inverse=True)
        found: dict[tuple[Value, ...], int] = {}
        values: list[dict[str, Value]] = []
        choice = []
        for point in points.tolist():
            chosen = {n: v for n, v in self.grid.at(point).items() if n in self.grid.choices}
            if (key := tuple(chosen.values())) not in found:
                found[key] = len(values)
                values.append(chosen)
            choice.append(found[key])
        reference = self._stack(values, np.arange(len(values)))
        row_of = np.full((len(values), len(self.base.names)), -1)
        if not reference.parts:
            return np.zeros(0), np.zeros(0, dtype=np.int64)
        solved = reference.solve(self.solver)
        known = np.flatnonzero(solved.status != UNSOLVED)
        row_of[reference.point[known], reference.order[known]] = known
        base_rows = row_of[np.array(choice)[where], stack.order]
        rows = np.flatnonzero(base_rows >= 0)
        _, at = reference.orders.stages.layout.take(base_rows[rows])
        return solved.shares[at], rows

    def _excess(self, part: Part) -> Array:
        """(rows,) shares of the base's schedule that the part's windows and caps forbid."""
        layout, base = part.book.layout, self.base.layout
        order_at = np.full(len(layout.size), -1)
        order_at[part.place] = part.order
        placed = [np.zeros(size) for size in layout.size.tolist()]
        for place in np.flatnonzero(order_at >= 0).tolist():
            order = order_at[place]
            span = slice(int(base.first[order]), int(base.last[order]) + 1)
            old, new = self.base.grids[order], part.book.grids[place]
            placed[place] = carried(self.base_shares[span], old, new)
        allowed = layout.sum(np.minimum(np.concatenate(placed), part.book.arrays.cap))
        excess = base.sum(self.base_shares)[part.order] - allowed[part.place]
        return np.where(excess > _WITHIN * part.book.arrays.quantity[part.place], excess, 0.0)


def _keeps_ceilings(orders: Orders, shares: Array) -> np.ndarray:
    """(N,) whether no more is left anywhere than `finish` allows."""
    layout = orders.stages.layout
    quantity = orders.quantity[layout.owner]
    over = quantity - layout.cumsum(shares) - orders.ceiling
    kept: np.ndarray = layout.max(over / quantity) <= _LATE
    return kept
