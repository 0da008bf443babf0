"""Fills laid on the buckets of a plan, and the model's figures of what was traded."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import InputError, Problem
from scheduler.figures import Figures
from scheduler.history.placed import AUCTION_WAIT
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.paths import in_volume
from scheduler.rest.fills import Fills
from scheduler.sessions import Grid, Kind
from scheduler.sessions.calendar import DAY, SECOND
from scheduler.tables.draft import Checked

_WAIT = AUCTION_WAIT * SECOND
_NOTHING = 1e-9  # shares, in place of none: a law of nothing traded is not asked for


@dataclass(frozen=True)
class Laid:
    """Order and stage of each fill, (F,), both counted through the book."""

    order: Index
    stage: Index
    notes: tuple[str, ...]


def lay(book: Book, fills: Fills, checked: Checked) -> Laid:
    """The bucket of each fill.

    A fill belongs to the bucket that its time lies in; at the very instant of an auction, and up to
    a quarter of an hour after a bucket behind which nothing trades, to that. Later fills of the
    same day count in the order's last bucket, with a note.

    Raises:
        InputError: an order traded more than its quantity; a fill while its market was closed, or
            on a day after its order's last.
    """
    frame = fills.frame
    number = {name: order for order, name in enumerate(book.names)}
    order: Index = np.array([number[name] for name in frame["order_id"]], dtype=np.int64)
    instant = frame["instant"].to_numpy(dtype=np.int64)
    stage = np.zeros(len(frame), dtype=np.int64)
    stray, late = np.zeros((2, len(frame)), dtype=np.bool_)
    for one in np.unique(order).tolist():
        mine = np.flatnonzero(order == one)
        at, stray[mine], late[mine] = _stages(book.grids[one], instant[mine])
        stage[mine] = at + book.layout.first[one]
    problems = [*_stray(checked, frame.index.to_numpy(), stray), *_overfilled(book, fills, checked)]
    if problems:
        raise InputError(problems)
    notes = [
        f"{book.names[one]}: fills after its end, "
        f"{book.grids[one].local_end[-1]}, count in its last bucket"
        for one in np.unique(order[late]).tolist()
    ]
    return Laid(order, stage, tuple(notes))


def _stages(grid: Grid, instant: Index) -> tuple[Index, NDArray[np.bool_], NDArray[np.bool_]]:
    """The stage of each fill; which have none, and which are late."""
    start, end = (times.astype(np.int64) for times in (grid.start, grid.end))
    opened = np.flatnonzero(grid.open)
    found = opened[np.maximum(np.searchsorted(start[opened], instant, side="right") - 1, 0)]
    before = np.maximum(found - 1, 0)
    # an auction and the bucket after it may begin at one instant: at that, it is the auction
    auction = (grid.kind[before] == Kind.AUCTION) & (instant <= end[before]) & (before < found)
    found = np.where(auction & (instant == start[found]), before, found)
    over = instant - end[found]
    last = found == opened[-1]
    late = last & (over > _WAIT)
    stray = np.where(last, over > DAY * SECOND // 2, over > _WAIT)
    return found, stray, late & ~stray


def _stray(checked: Checked, rows: Index, stray: NDArray[np.bool_]) -> list[Problem]:
    mask = np.zeros(len(checked.frame), dtype=np.bool_)
    mask[rows[stray]] = True
    rule = "is while its market is closed, or long after its order's end"
    return checked.problems(mask, "time", rule, "correct the time, or give it with its date")


def _overfilled(book: Book, fills: Fills, checked: Checked) -> list[Problem]:
    done = fills.by_order(book.names)
    over = np.flatnonzero(done > book.arrays.quantity * (1.0 + 1e-9))
    return [
        Problem(
            checked.source,
            None,
            "quantity",
            f"{done[one]:,.10g}",
            f"fills of {book.names[one]} are more than its {book.arrays.quantity[one]:,.10g} "
            "shares",
            "remove what is not this order's",
        )
        for one in over.tolist()
    ]


def figures_of(promised: Figures, laid: Laid, shares: Array) -> Figures:
    """The model's figures of what was traded: its cost, and the law of that.

    What an order left undone is no part of it, and bears no risk.
    """
    entries = promised.orders.stages.layout.entries
    done: Array = np.bincount(laid.stage, shares, minlength=entries).astype(float)
    traded = promised.orders.stages.layout.sum(done)
    orders = replace(promised.orders, quantity=np.maximum(traded, _NOTHING))
    return replace(promised, orders=orders, shares=done)


def in_the_volume(figures: Figures, factor: Array) -> Figures:
    """The same where the others' volume of each stage was `factor` (M,) times its forecast."""
    return replace(figures, orders=in_volume(figures.orders, factor))


def displacement_cost(figures: Figures) -> Array:
    """(M,) what impact, passing and lasting, was to cost at each stage."""
    charges = (figures.charges.spread + figures.charges.fees) * figures.shares
    result: Array = figures.stage_cost - charges
    return result
