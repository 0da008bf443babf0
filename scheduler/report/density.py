"""The density of a cost with its quantiles, beside the normal of the same mean and sd."""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.figures import Figures
from scheduler.model.mixture import CostDistribution
from scheduler.report.markup import number

_REACH = 3.6  # standard deviations either side
_INTERVALS = 180
_TAIL = 0.95
_MARKS = {0.05: 0.5, 0.50: 1.1, 0.95: 0.5, 0.99: 0.18}
"""Quantiles marked, and the heights of their stems, staggered so that no label meets another."""
_SHORTFALL_HEIGHT = 0.34


def density(figures: Figures, order: int) -> dict[str, Any] | None:
    """What the chart of one order's distribution draws; None if the cost is certain."""
    return density_of(figures.distribution(order), float(figures.notional[order]))


def density_of(law: CostDistribution, notional: float) -> dict[str, Any] | None:
    """The same of a law, N = 1, in bps of a notional."""
    bps = 1e4 / notional
    mean, std = float(law.mean[0]), float(law.std[0])
    if std == 0.0:
        return None
    edges = np.linspace(mean - _REACH * std, mean + _REACH * std, _INTERVALS + 1)
    middle = 0.5 * (edges[1:] + edges[:-1])
    mixture = np.diff(law.cdf(edges)) / np.diff(edges) / bps
    normal = np.exp(-0.5 * ((middle - mean) / std) ** 2) / np.sqrt(2.0 * np.pi) / (std * bps)
    top = max(float(mixture.max()), float(normal.max()))
    marks = {p: bps * float(law.quantile(p)[0]) for p in _MARKS}
    shortfall = bps * float(law.expected_shortfall(_TAIL)[0])
    tail = bps * middle >= marks[_TAIL]
    return {
        "density_x": (bps * middle).tolist(),
        "mixture": mixture.tolist(),
        "normal": normal.tolist(),
        "tail_x": (bps * middle[tail]).tolist(),
        "tail": mixture[tail].tolist(),
        "mark_x": [point for x in marks.values() for point in (x, x, None)],
        "mark_y": [point for height in _MARKS.values() for point in (0.0, height * top, None)],
        "shortfall_x": [shortfall, shortfall],
        "shortfall_y": [0.0, _SHORTFALL_HEIGHT * top],
        "label_x": [*marks.values(), shortfall],
        "label_y": [top * height for height in (*_MARKS.values(), _SHORTFALL_HEIGHT)],
        "label_text": [
            *(f"{100 * p:g} %: {number(x, 1)}" for p, x in marks.items()),
            f"ES {100 * _TAIL:g} %: {number(shortfall, 1)}",
        ],
        # Room on the right for labels.
        "cost_range": [bps * (mean - _REACH * std), bps * (mean + (_REACH + 0.6) * std)],
        "density_range": [0.0, 1.28 * top],
    }
