"""A list planned as one, played forward: its names share volume, energy levels and factors."""

from __future__ import annotations

import numpy as np

from scheduler.balances import list_law
from scheduler.figures import Figures
from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Array
from scheduler.paths import Noise, Played, Told, fills, in_volume, volume_factors
from scheduler.transition import Transition

MOST_AT_RANDOM = 2_000
"""Paths of a list whose volumes are at random, each of which is the whole list's day anew."""

_TOLD_EVERY = 50


def play_list(
    transition: Transition,
    figures: Figures,
    noise: Noise,
    paths: int,
    rng: np.random.Generator,
    *,
    told: Told | None = None,
) -> Played:
    """Play a list; `figures` are those of its names, pools as one."""
    if not noise.any:
        cost = _drawn(list_law(transition, figures), paths, rng)
        if told is not None:
            told(paths)
        mean, done = float(figures.expected_cost.sum()), _done(figures)
        left, price = float(figures.residual.sum()), float(figures.residual_cost.sum())
        same = (np.full(paths, value) for value in (mean, left, price))
        expected, residual, residual_cost = same
        return Played(cost, expected, residual, residual_cost, np.full(paths, done))
    count = min(paths, MOST_AT_RANDOM)
    rows = np.empty((count, 5))
    for path in range(count):
        rows[path] = _one(transition, figures, noise, rng)
        if told is not None and (path % _TOLD_EVERY == 0 or path == count - 1):
            told(int(paths * (path + 1) / count))
    cost, expected, residual, residual_cost, last = rows.T
    return Played(cost, expected, residual, residual_cost, last.astype(np.int64))


def _one(
    transition: Transition, figures: Figures, noise: Noise, rng: np.random.Generator
) -> tuple[float, float, float, float, int]:
    """One path: cost, its mean given the volumes, what is left and its price, the last fill."""
    factor = volume_factors(figures.orders.stages, noise, rng, together=True)
    orders = in_volume(figures.orders, factor)
    shares = fills(orders, figures.shares, factor if noise.following else None)
    found = Figures(orders, figures.charges, shares)
    law = list_law(transition, found)
    left, price = float(found.residual.sum()), float(found.residual_cost.sum())
    return float(_drawn(law, 1, rng)[0]), float(law.mean[0]), left, price, _done(found)


def _drawn(law: CostDistribution, paths: int, rng: np.random.Generator) -> Array:
    """(P,) costs: levels for each session, then a normal of the variance they make."""
    rate = float(law.level_rate[0])
    levels = rng.poisson(rate, (paths, len(law.base)))
    swing = (1.0 + 2.0 * levels) / (1.0 + 2.0 * rate)
    variance = swing @ law.base[:, 0] + law.own.sum()
    result: Array = law.mean[0] + np.sqrt(variance) * rng.standard_normal(paths)
    return result


def _done(figures: Figures) -> int:
    """The latest stage, within its order, in which anything fills."""
    layout = figures.orders.stages.layout
    stage = np.arange(layout.entries) - layout.first[layout.owner]
    return int(np.where(figures.shares > 0.0, stage, -1).max())
