"""The schedules a plan is compared with, and the worlds it is tried in.

Rivals keep the same caps: their pattern is followed where the caps allow, and what they cut off is
spread over the rest in the same proportions.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scheduler.figures import Figures
from scheduler.intake import Book, market_arrays
from scheduler.model.laws import IMPACT_LAWS
from scheduler.model.ragged import Array, Ragged
from scheduler.model.stages import Market
from scheduler.problem import Orders
from scheduler.sessions import Kind

_FILL_ROUNDS = 200


def evenly_timed(book: Book) -> Array:
    """Slices in proportion to clock time in continuous trading, (M,) shares."""
    seconds = np.concatenate([(grid.end - grid.start) for grid in book.grids])
    length = seconds.astype("timedelta64[ns]").astype(float)
    pattern = np.where(book.kind == Kind.CONTINUOUS, length, 0.0)
    has_any = (book.layout.sum(pattern) > 0.0)[book.layout.owner]
    return following(book.arrays, np.where(has_any, pattern, 1.0))


def volume_proportional(book: Book) -> Array:
    """Slices in proportion to the expected volume, auctions included, (M,) shares."""
    pattern = np.concatenate([grid.volume for grid in book.grids])
    return following(book.arrays, pattern)


def following(orders: Orders, pattern: Array) -> Array:
    """Fill up to each order's quantity in proportion to a pattern, within the caps.

    Buckets outside the pattern are used only where the others cannot take it all.
    """
    layout, cap = orders.stages.layout, orders.cap
    quantity = orders.quantity
    goal = np.minimum(quantity, layout.sum(np.minimum(cap, quantity[layout.owner])))
    shares = _water_fill(layout, pattern, cap, goal)
    missing = goal - layout.sum(shares)
    return shares + _water_fill(layout, np.ones(len(cap)), cap - shares, missing)


def _water_fill(layout: Ragged, pattern: Array, cap: Array, goal: Array) -> Array:
    """min(cap, level x pattern) with the level at which each order reaches its goal."""
    owner = layout.owner
    shares = np.zeros(len(cap))
    for _ in range(_FILL_ROUNDS):
        missing = goal - layout.sum(shares)
        free = np.where(shares < cap, pattern, 0.0)
        weight = layout.sum(free)
        done = (missing <= 1e-12 * goal) | (weight <= 0.0)
        if done.all():
            break
        step = np.where(done, 0.0, missing) / np.where(weight > 0.0, weight, 1.0)
        shares = np.minimum(shares + step[owner] * free, cap)
    return shares


def under_laws(book: Book, shares: Array) -> dict[str, Figures]:
    """The schedule's cost under each other published impact law."""
    own = book.settings.model.impact_law
    return {
        name: Figures(under_law(book, name), book.charges, shares)
        for name in IMPACT_LAWS
        if name != own
    }


def under_law(book: Book, law: str) -> Orders:
    """The orders where another law holds; its constants alone, not the market table's."""
    return in_market(book.arrays, market_arrays(book.rows, book.settings, law=law))


def in_market(orders: Orders, market: Market) -> Orders:
    """The same orders in another market; its relaxation goes into every stage's V/L.

    Caps and the imbalance at time zero stay what they are, in shares.
    """
    stages = orders.stages
    slower = (orders.market.relaxation / market.relaxation)[stages.layout.owner]
    return replace(orders, market=market, stages=replace(stages, theta=stages.theta * slower))


def other_volumes(book: Book, shares: Array) -> dict[str, Figures]:
    """The schedule if volume ran at half or double its forecast.

    Following the clock, slices stay where they are. Following the volume, each bucket's slice
    keeps its participation: at half the volume half is left at the end, at double the volume the
    order is done early.
    """
    result = {}
    for word, factor in (("half", 0.5), ("double", 2.0)):
        orders = replace(book.arrays, market=book.arrays.market.scaled(volume=factor))
        result[f"{word}_by_clock"] = Figures(orders, book.charges, shares)
        layout = book.layout
        traded = np.minimum(layout.cumsum(shares) * factor, book.arrays.quantity[layout.owner])
        followed = traded - layout.before(traded, np.zeros(len(layout.size)))
        result[f"{word}_by_volume"] = Figures(orders, book.charges, followed)
    return result
