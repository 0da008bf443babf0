"""Implementation shortfall and its parts, from plain arrays [Perold 1988].

The shortfall of an order is what it would have earned on paper, all of it dealt at the decision
price p_d and valued at the price p_c at which what stays undone is given up, less what it has
earned: with fills q_j at p_j, s the side, Q the quantity and R = Q - sum q_j,

    s Q (p_c - p_d) - [s sum q_j (p_c - p_j) - fees]
        = s sum q_j (p_a - p_d)     delay: until the order was in the market, at p_a
        + s sum q_j (p_j - p_a)     execution
        + s R (p_c - p_d)           opportunity
        + fees                      explicit.

Execution is what crossing half the spread costs, the displacement that the model expects of these
fills, and, with m_j the market's price at the time of a fill,

    timing   = s sum q_j (m_j - p_a) - displacement    how the market moved beside that
    residual = s sum q_j (p_j - m_j) - spread          how the fills did against the market.

Where m_j is not known timing is not, and the residual holds both. Costs are positive.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from scheduler.model.ragged import Array, Index

EXECUTION = ("spread", "displacement", "timing", "residual")
PARTS = ("delay", *EXECUTION, "opportunity", "explicit")


def part_words(name: str, row: Mapping[str, Any]) -> str:
    """A part's name; the residual's where it holds the timing, which is then None, as well."""
    return "timing and residual" if name == "residual" and row["timing"] is None else name


@dataclass(frozen=True)
class Dealt:
    """Fills, (F,) each: the order each belongs to, shares, price, fee, and the market's price.

    `market` is NaN where it is not known. Money of an order is in one currency throughout.
    """

    order: Index
    shares: Array
    price: Array
    fee: Array
    market: Array

    def by_order(self, values: Array, count: int) -> Array:
        """(count,) sums of a figure of the fills."""
        result: Array = np.bincount(self.order, values, minlength=count).astype(float)
        return result


@dataclass(frozen=True)
class Benchmarks:
    """Prices of each order, (N,): when it was decided, when it began, when it was given up.

    `given_up` may be NaN for orders of which nothing stays undone.
    """

    decision: Array
    arrival: Array
    given_up: Array


@dataclass(frozen=True)
class Parts:
    """What the shortfall of each order consists of, (N,); timing is NaN where it is not known."""

    delay: Array
    spread: Array
    displacement: Array
    timing: Array
    residual: Array
    opportunity: Array
    explicit: Array

    @property
    def execution(self) -> Array:
        result: Array = self.spread + self.displacement + np.nan_to_num(self.timing) + self.residual
        return result

    @property
    def total(self) -> Array:
        result: Array = self.delay + self.execution + self.opportunity + self.explicit
        return result


def split(
    side: Array,
    quantity: Array,
    prices: Benchmarks,
    fills: Dealt,
    spread: Array,
    displacement: Array,
) -> Parts:
    """The parts of each order's shortfall.

    Parameters
    ----------
    side, quantity : (N,). spread, displacement : (N,) what crossing and impact were to cost.
    """
    count = len(side)
    traded = fills.by_order(fills.shares, count)
    start = prices.arrival[fills.order]
    execution = side * fills.by_order(fills.shares * (fills.price - start), count)
    moved = side * fills.by_order(fills.shares * (fills.market - start), count)
    timing = moved - displacement
    return Parts(
        delay=side * traded * (prices.arrival - prices.decision) + 0.0,  # no -0
        spread=spread,
        displacement=displacement,
        timing=timing,
        residual=execution - spread - displacement - np.nan_to_num(timing),
        opportunity=_given_up(side, quantity - traded, prices),
        explicit=fills.by_order(fills.fee, count),
    )


def _given_up(side: Array, left: Array, prices: Benchmarks) -> Array:
    moved = side * left * (prices.given_up - prices.decision)
    return np.where(left > 0.0, moved, 0.0)


def paper_less_real(side: Array, quantity: Array, prices: Benchmarks, fills: Dealt) -> Array:
    """The shortfall by its definition, (N,); every order needs the price it is given up at."""
    count, end = len(side), prices.given_up
    paper = side * quantity * (end - prices.decision)
    earned = side * fills.by_order(fills.shares * (end[fills.order] - fills.price), count)
    result: Array = paper - (earned - fills.by_order(fills.fee, count))
    return result


def adjusted(total: Array, side: Array, paper: Array, beta: Array, market_move: Array) -> Array:
    """The shortfall less what the market's move explains: s beta m of the paper's value, (N,)."""
    result: Array = total - side * beta * market_move * paper
    return result
