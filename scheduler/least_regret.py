"""The robust choice: the schedule whose worst regret over several worlds is least.

Regret in a world is C + lambda Var there less the least it can be there, at one lambda: the plain
plan's. The plain schedule is kept wherever the robust one, in whole lots, is no better.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.outcome import brief_figures
from scheduler.problem import Orders, assemble
from scheduler.solve import convexity
from scheduler.solve.feasible import forced_shares
from scheduler.solve.minimax import Minimax, least_worst_regret
from scheduler.solve.optimality import objective_parts
from scheduler.solve.schedule import Progress, Schedule, Status
from scheduler.solve.slices import Sliced, rounded
from scheduler.uncertainty import regrets

CLOSE = 1e-4
"""A gap, relative to the worst regret, that goes unmentioned."""
_NOTHING = 1e-8  # of impact and risk: as well as any optimum is known


@dataclass(frozen=True)
class Choice:
    """sliced : the schedule chosen. rows : what is told of each order. notes : of gaps."""

    sliced: Sliced
    rows: list[dict[str, Any]]
    notes: list[str]


@dataclass(frozen=True)
class _Robust:
    """One order's robust slices, whether every world is convex, and the gap over worst regret."""

    found: Minimax
    shares: Array
    convex: bool
    gap: float


def choose(
    book: Book,
    sliced: Sliced,
    worlds: Mapping[str, Orders],
    best: Array,
    progress: Progress | None = None,
) -> Choice:
    """The least worst regret of every order, in whole lots, beside the plain schedule's.

    Parameters
    ----------
    sliced : the plain schedule. best : (K, M) the best slices of each world at its lambda.
    """
    orders, plain = book.arrays, sliced.schedule
    layout, price = orders.stages.layout, plain.risk_aversion
    free = np.flatnonzero(~forced_shares(orders)[1])
    ideal, robust = plain.shares.copy(), {}
    for order in free.tolist():
        _, at = layout.take(np.array([order]))
        robust[order] = _solved(order, price[order], worlds, best[:, at], plain.shares[at])
        ideal[at] = robust[order].shares
        if progress is not None:
            progress(len(robust), len(free))
    shares = rounded(orders, ideal, book.lot)
    before = regrets(book, worlds, best, sliced.shares, price)
    after = regrets(book, worlds, best, shares, price)
    better = after.max(axis=0) < before.max(axis=0)
    chosen = np.where(better[layout.owner], shares, sliced.shares)
    told = {name: np.where(better, after, before)[k] for k, name in enumerate(worlds)}
    rows = _rows(book, sliced.shares, told, dict(zip(worlds, before, strict=True)))
    for order, row in enumerate(rows):
        row["schedule"] = "robust" if better[order] else "plain"
        row["risk_aversion"] = float(price[order])
        row["gap"] = robust[order].gap if order in robust else 0.0
        row["proven"] = robust[order].convex if order in robust else True
    notes = [
        f"{book.names[order]}: the least worst regret is only known to {one.gap:.1%} of it"
        for order, one in robust.items()
        if one.gap > CLOSE
    ]
    schedule = _merged(plain, np.where(better[layout.owner], ideal, plain.shares), robust, better)
    return Choice(replace(sliced, shares=chosen, schedule=schedule), rows, notes)


def _solved(
    order: int, price: float, worlds: Mapping[str, Orders], best: Array, plain: Array
) -> _Robust:
    """One order. best : (K, stages) its best slices in each world. plain : (stages,)."""
    which = np.array([order])
    many = Orders.stack([world.take(which) for world in worlds.values()])
    count = len(many)
    problem = assemble(many.asking(np.zeros(count), np.full(count, price)))
    problem = problem.in_unit(float(problem.scale.max()))
    point = objective_parts(problem, problem.fractions(best.ravel())).point
    least = point.cost + problem.risk_aversion * point.risk
    start = problem.fractions(np.tile(plain, count))[: problem.layout.size[0]]
    found = least_worst_regret(problem, least, start)
    shares = problem.shares(np.tile(found.fractions, count), many.stages.layout.entries)
    gap = max(found.worst - found.bound, 0.0)
    return _Robust(
        found,
        shares[: len(plain)],
        bool(convexity.is_convex(problem, problem.risk_aversion).all()),
        0.0 if gap <= _NOTHING * found.size else gap / found.worst,
    )


def _merged(
    plain: Schedule, shares: Array, robust: Mapping[int, _Robust], better: Index
) -> Schedule:
    """The plain schedules with those of orders where the robust one is better in their place."""
    status, gap = list(plain.status), plain.gap.copy()
    residual, iterations = plain.kkt_residual.copy(), plain.iterations.copy()
    for order, one in robust.items():
        if better[order]:
            status[order] = Status.PROVEN if one.convex else Status.LOCAL
            gap[order] = max(one.found.worst - one.found.bound, 0.0) / one.found.size
            residual[order] = one.found.kkt_residual
            iterations[order] += one.found.iterations
    return replace(
        plain, shares=shares, status=status, gap=gap, kkt_residual=residual, iterations=iterations
    )


def _rows(
    book: Book, plain: Array, after: Mapping[str, Array], before: Mapping[str, Array]
) -> list[dict[str, Any]]:
    """Each order's regret in every world, of the schedule chosen and of the plain one."""
    figures = Figures(book.arrays, book.charges, plain)
    rows = []
    for order, brief in enumerate(brief_figures(figures)):
        unit = 1e4 / float(figures.notional[order])
        mine, theirs = (
            {name: float(by[name][order]) * unit for name in by} for by in (after, before)
        )
        rows.append(
            {
                "worst_regret_bps": max(mine.values()),
                "worst_world": max(mine, key=lambda name: mine[name]),
                "plain_worst_regret_bps": max(theirs.values()),
                "plain_worst_world": max(theirs, key=lambda name: theirs[name]),
                "regret_bps": mine,
                "plain_regret_bps": theirs,
                "plain": brief,
            }
        )
    return rows
