"""Parameters are estimates: what a schedule costs over draws of them, and how the best one moves.

Per order, at the plan's implied lambda: the range of expected cost and of standard deviation, the
regret, C + lambda Var of the schedule less that of the best one for the draw, and how far the best
cumulative schedule lies from this one.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.problem import Orders

_RANGE = {"low": 0.05, "middle": 0.5, "high": 0.95}


def regrets(
    book: Book, worlds: Mapping[str, Orders], best: Array, shares: Array, price: Array
) -> Array:
    """C + lambda Var of slices (M,) over that of each world's best (K, M), currency, (K, N)."""

    def value(world: Orders, slices: Array) -> Array:
        figures = Figures(world, book.charges, slices)
        result: Array = figures.expected_cost + price * figures.cost_std**2
        return result

    pairs = zip(worlds.values(), best, strict=True)
    # where a world is not convex its best is the best found, which the plan's may beat
    return np.array([np.maximum(value(w, shares) - value(w, own), 0.0) for w, own in pairs])


def over_draws(
    book: Book, draws: Mapping[str, Orders], best: Array, shares: Array, price: Array
) -> tuple[list[dict[str, Any]], dict[str, Any]]:
    """What draws make of a schedule: each order's figures, and the total's.

    Parameters
    ----------
    best : (K, M) the best slices of each draw. price : (N,) lambda.
    """
    figures = [Figures(world, book.charges, shares) for world in draws.values()]
    cost = np.array([one.cost_bps for one in figures])
    std = np.array([one.cost_std for one in figures])
    regret = regrets(book, draws, best, shares, price)
    notional = figures[0].notional
    rows = [
        {
            "draws": len(draws),
            "expected_cost_bps": _range(cost[:, order]),
            "cost_std_bps": _range(1e4 * std[:, order] / notional[order]),
            "regret_bps": _range(1e4 * regret[:, order] / notional[order]),
            "moves": move,
        }
        for order, move in enumerate(_moves(book, best, shares))
    ]
    total = {
        "draws": len(draws),
        "expected_cost_bps": _range(np.array([_cost_in_all(one) for one in figures])),
        "regret_bps": _range(1e4 * regret.sum(axis=1) / notional.sum()),
    }
    return rows, total


def _cost_in_all(figures: Figures) -> float:
    """Expected cost of all orders, basis points of what trades."""
    value = float((figures.traded * figures.orders.market.price).sum())
    return 1e4 * float(figures.expected_cost.sum()) / value if value else 0.0


def _moves(book: Book, best: Array, shares: Array) -> list[dict[str, Any]]:
    """How far the best schedules lie from this one, as parts of each order.

    middle, high : of the largest |x_best - x| at any time, over draws. at : when |x_best - x| is
    largest at its 95 % point.
    """
    layout = book.layout
    held = layout.cumsum(shares)
    apart = np.array([np.abs(layout.cumsum(own) - held) for own in best])
    apart /= book.arrays.quantity[layout.owner]
    furthest = layout.max(apart)
    wide = np.quantile(apart, _RANGE["high"], axis=0)
    result = []
    for order, grid in enumerate(book.grids):
        span = slice(layout.first[order], layout.last[order] + 1)
        part = {name: float(np.quantile(furthest[:, order], _RANGE[name])) for name in _MOVES}
        when = grid.local_end[int(wide[span].argmax())] if part["high"] > 0.0 else None
        result.append({**part, "at": when})
    return result


_MOVES = ("middle", "high")


def _range(values: Array) -> dict[str, float]:
    """5 %, 50 % and 95 % points, and the ends."""
    named = {name: float(np.quantile(values, p)) for name, p in _RANGE.items()}
    return {**named, "least": float(values.min()), "most": float(values.max())}
