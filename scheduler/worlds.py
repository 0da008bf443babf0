"""The worlds a plan may find itself in: published laws of impact, and parameters drawn at random.

A draw takes every estimate from its interval: the value is the median, low and high are the 2.5 %
and 97.5 % points of a normal law in two halves, of the logarithm where the parameter is a scale;
beyond its permitted range a parameter is cut off. Estimates are drawn independently, by a Latin
hypercube: every 1/n of each law holds one of the n draws. Caps, charges and the imbalance at time
zero, in shares, are the plan's in every world; but a reading counts by the weight drawn.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from scheduler.intake import Book, market_arrays
from scheduler.model.ragged import Array
from scheduler.problem import Orders
from scheduler.rivals import in_market, under_law
from scheduler.solve.schedule import Progress, Solver, schedule
from scheduler.tables.estimates import ON_A_LINE, RANGES, Estimate, Estimates

DRAWS = 32
SEED = 1
_POINT = 1.959963984540054  # the normal law's 97.5 % point
_STAGES = 400_000  # stages solved together


def law_worlds(book: Book, laws: Sequence[str]) -> dict[str, Orders]:
    """The orders under each of some laws; the settings' own is as the plan has it."""
    own = book.settings.model.impact_law
    return {law: book.arrays if law == own else under_law(book, law) for law in laws}


def draw_worlds(
    book: Book, estimates: Estimates, *, count: int = DRAWS, seed: int = SEED
) -> dict[str, Orders]:
    """The orders under `count` draws of their parameters; the same seed, the same draws."""
    values = drawn(estimates, count, seed)
    return {
        f"draw {i + 1}": _world(book, dict(zip(estimates.items, row, strict=True)))
        for i, row in enumerate(values.tolist())
    }


def drawn(estimates: Estimates, count: int, seed: int) -> Array:
    """Values of every estimate, (count, n)."""
    from scipy.special import ndtri  # noqa: PLC0415

    rng = np.random.default_rng(seed)
    middle = ndtri((np.arange(count) + 0.5) / count) / _POINT
    return np.column_stack([_quantile(item, rng.permutation(middle)) for item in estimates.items])


def _quantile(item: Estimate, at: Array) -> Array:
    """Values at normal points; -1 is the interval's low end, 1 its high end."""
    value, low, high = item.value, item.low, item.high
    lowest, highest = RANGES[item.name]
    scale = item.name not in ON_A_LINE and low > 0.0
    if scale:
        value, low, high = (float(np.log(v)) for v in (value, low, high))
    found = value + at * np.where(at < 0.0, value - low, high - value)
    return np.clip(np.exp(found) if scale else found, lowest, highest)


def _world(book: Book, values: Mapping[Estimate, float]) -> Orders:
    """The orders with parameters in place of the settings' and the market table's."""
    rows, settings = book.rows.copy(), book.settings
    symbols = rows["symbol"].to_numpy()
    believed = 1.0
    for item, value in sorted(values.items(), key=lambda pair: pair[0].symbol is not None):
        if item.name == "level_rate":
            settings = settings.with_values("model", level_rate=value)
        elif item.name == "reading_weight":
            weight = settings.model.reading_weight
            believed = value / weight if weight > 0.0 else 1.0
        else:
            mine = symbols == item.symbol if item.symbol is not None else np.full(len(rows), True)
            rows[item.name] = np.where(mine, value, rows[item.name].to_numpy(dtype=float))
    orders = in_market(book.arrays, market_arrays(rows, settings))
    return replace(orders, initial=orders.initial * believed)


def best_in(
    worlds: Sequence[Orders],
    price: Array,
    start: Array,
    solver: Solver,
    progress: Progress | None = None,
) -> tuple[Array, NDArray[np.bool_]]:
    """The best slices of each world at one price of risk, (K, M); which were found, (K, N).

    Parameters
    ----------
    price : (N,) lambda of each order. start : (M,) slices to begin from.
    """
    none = np.zeros(len(price))
    shares, found = np.empty((len(worlds), len(start))), np.empty((len(worlds), len(price)), bool)
    each = max(1, _STAGES // len(start))
    for first in range(0, len(worlds), each):
        part = worlds[first : first + each]
        many = Orders.stack([world.asking(none, price) for world in part])
        solved = schedule(
            many, start=np.tile(start, len(part)), certify=False, solver=solver, progress=progress
        )
        shares[first : first + each] = solved.shares.reshape(len(part), -1)
        found[first : first + each] = solved.converged.reshape(len(part), -1)
    return shares, found
