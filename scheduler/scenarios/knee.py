"""Efficient frontiers within a table of scenarios, and where each has its knee."""

from __future__ import annotations

import heapq
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from scheduler.model.ragged import Array
from scheduler.scenarios.axes import Grid, Value

_BENT = 1e-6  # a distance from the chord below which there is no knee
_FLAT = 1e-6  # of the risk: a frontier within it is a point
_NEAREST = 8  # frontiers of an order that are kept of a table on disk
SOLVED = ("proven", "bounded", "local")
FRONTIER_COLUMNS = ("status", "cost_std_bps", "expected_cost_bps")
"""What `frontiers` reads of a table, besides its labels and axes."""


def knee(risk: Array, cost: Array) -> int | None:
    """The place of the point farthest below the chord, with risk and cost scaled to [0, 1].

    risk, cost : (K,) along a frontier from its patient to its urgent end, or the other way. With
    the ends at (1, 0) and (0, 1) the distance from the chord is (1 - risk - cost)/sqrt(2). None
    where there are fewer than three points or no bend.
    """
    least = _FLAT * np.abs(risk).max()
    if len(risk) < 3 or np.ptp(risk) <= least or np.ptp(cost) <= least:
        return None
    x = (risk - risk.min()) / np.ptp(risk)
    y = (cost - cost.min()) / np.ptp(cost)
    below = (1.0 - x - y) / np.sqrt(2.0)
    best = int(np.argmax(below))
    return best if below[best] > _BENT else None


@dataclass(frozen=True)
class Frontier:
    """The points of one order that share everything but the aim, from patient to urgent.

    values : its other axes. aim, risk, cost : (K,), bps of notional. rows : (K,) places in the
    table of scenarios. knee : place among the K, or None.
    """

    order_id: str
    values: dict[str, Value]
    aim: Array
    risk: Array
    cost: Array
    rows: Array
    knee: int | None

    def away(self, near: Mapping[str, Value]) -> int:
        """How many of its other axes differ from these values."""
        return sum(value != near[name] for name, value in self.values.items())

    @property
    def prices(self) -> tuple[float, float] | None:
        """Cost of each bp of risk shed up to the knee, and beyond it."""
        if self.knee is None:
            return None
        (before, paid), (beyond, more) = self._legs
        return paid / before, more / beyond

    @property
    def _legs(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """Risk shed and cost paid from the patient end to the knee, and from there on."""
        risk, cost, k = self.risk, self.cost, self.knee
        assert k is not None
        to = float(risk[0] - risk[k]), float(cost[k] - cost[0])
        return to, (float(risk[k] - risk[-1]), float(cost[-1] - cost[k]))

    @property
    def words(self) -> str:
        """The knee explained."""
        prices = self.prices
        if prices is None:
            return "No knee: the frontier is straight, a single point, or has too few points."
        (gone, paid), (more, dearer) = self._legs
        return (
            f"Up to the knee {paid:.2f} bps of cost shed {gone:.2f} bps of risk, "
            f"{prices[0]:.2g} for each; beyond it {dearer:.2f} bps shed {more:.2f}, "
            f"{prices[1]:.2g} for each."
        )


def frontiers(scenarios: pd.DataFrame, grid: Grid) -> Iterator[Frontier]:
    """Every frontier of a table of scenarios; none without an axis of urgency or risk aversion."""
    if grid.aim is None:
        return
    others = [name for name in grid.axes if name != grid.aim]
    found = scenarios[(scenarios["point"] > 0) & scenarios["status"].isin(SOLVED)]
    found = found.assign(place=found.index)
    columns = [grid.aim, "cost_std_bps", "expected_cost_bps", "place"]
    for key, group in found.groupby([*others, "order_id"], sort=False):
        ordered = group[columns].sort_values(grid.aim).to_numpy(dtype=float)
        aim, risk, cost, rows = ordered.T
        names: tuple[Any, ...] = key
        values = dict(zip(others, names[:-1], strict=True))
        yield Frontier(
            str(names[-1]), values, aim, risk, cost, rows.astype(np.int64), knee(risk, cost)
        )


def nearest(lines: Iterable[Frontier], near: Mapping[str, Mapping[str, Value]]) -> list[Frontier]:
    """Of each order the few frontiers whose other axes differ least from the values near it."""
    by_order: dict[str, list[Frontier]] = {}
    for line in lines:
        by_order.setdefault(line.order_id, []).append(line)
    return [
        line
        for name, own in by_order.items()
        for line in heapq.nsmallest(_NEAREST, own, key=lambda line: line.away(near[name]))
    ]
