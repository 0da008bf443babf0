"""A schedule played forward in the model: volumes, fills and prices, path by path.

On each path the others' volume runs at random around its forecast, V_t e_t, with log e_t normal and
E e_t = 1; what a cap on the volume that came cuts off a slice waits for the next buckets. Given the
volumes and the energy levels n_d of the sessions a path's cost is normal, with the model's mean and
variance for its fills: without noise the costs have exactly the law that the plan states.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from scheduler.figures import Charges, Figures
from scheduler.model.ragged import Array, Index
from scheduler.model.stages import Stages
from scheduler.problem import Orders

SESSION_NOISE, BUCKET_NOISE = 0.3, 0.4
"""Standard deviations of log volume, of a session and of a bucket in it (from memory)."""

_ENTRIES = 120_000  # stages of all paths of a batch: about 100 MB at work

Told = Callable[[int], None]


@dataclass(frozen=True)
class Noise:
    """Standard deviations of log volume: of a whole session, and of a bucket around it.

    following : whether slices keep their planned share of the volume that comes (the order is then
    done early, or not at all), or the clock.
    """

    session: float = 0.0
    bucket: float = 0.0
    following: bool = False

    @property
    def any(self) -> bool:
        return self.session > 0.0 or self.bucket > 0.0


@dataclass(frozen=True)
class Played:
    """One order on P paths, (P,) each, base currency.

    cost : of what traded. expected : its mean given the path's volumes. residual : shares left;
    residual_cost : their price as one block at the end, never part of the cost. last : stage of
    the last fill, -1 if none.
    """

    cost: Array
    expected: Array
    residual: Array
    residual_cost: Array
    last: Index


def play(
    figures: Figures,
    order: int,
    noise: Noise,
    paths: int,
    rng: np.random.Generator,
    *,
    told: Told | None = None,
) -> Played:
    """Play one order of a plan's figures (of a pool, one of `Figures.pooled`).

    told : called with the number of paths done after each batch.
    """
    at_once = max(1, _ENTRIES // int(figures.orders.stages.layout.size[order]))
    done = 0
    batches = []
    while done < paths:
        count = min(at_once, paths - done)
        batches.append(_batch(figures, order, noise, count, rng))
        done += count
        if told is not None:
            told(done)
    columns = zip(*(vars(batch).values() for batch in batches), strict=True)
    return Played(*(np.concatenate(column) for column in columns))


def _batch(
    figures: Figures, order: int, noise: Noise, paths: int, rng: np.random.Generator
) -> Played:
    """Some paths: all of one figure set where volumes are as forecast, else an order for each."""
    copies = 1 if not noise.any else paths
    _, at = figures.orders.stages.layout.take(np.full(copies, order))
    orders = figures.orders.take(np.full(copies, order))
    charges = Charges(figures.charges.spread[at], figures.charges.fees[at])
    shares = figures.shares[at]
    if noise.any:
        factor = volume_factors(orders.stages, noise, rng)
        orders = in_volume(orders, factor)
        shares = fills(orders, shares, factor if noise.following else None)
    found = Figures(orders, charges, shares)
    variance = _variance(found, paths, rng)
    expected = np.broadcast_to(found.expected_cost, paths)
    layout = orders.stages.layout
    stage = np.arange(layout.entries) - layout.first[layout.owner]
    last = layout.max(np.where(shares > 0.0, stage, -1.0))
    return Played(
        expected + np.sqrt(variance) * rng.standard_normal(paths),
        expected.copy(),
        np.broadcast_to(found.residual, paths).copy(),
        np.broadcast_to(found.residual_cost, paths).copy(),
        np.broadcast_to(last, paths).astype(np.int64),
    )


def _variance(found: Figures, paths: int, rng: np.random.Generator) -> Array:
    """(P,) sum_d a_d + 2 n_d b_d, with levels n_d drawn for each path and session."""
    orders, layout = found.orders, found.orders.stages.layout
    base, own = found.stage_variance
    rate = float(orders.market.level_rate[0])
    sessions = int(orders.stages.session.max()) + 1
    levels = rng.poisson(rate, (paths, sessions))
    swing = (1.0 + 2.0 * levels) / (1.0 + 2.0 * rate)
    by_session = np.zeros((len(orders), sessions))
    np.add.at(by_session, (layout.owner, orders.stages.session), base)
    result: Array = (by_session * swing).sum(axis=1) + layout.sum(own)
    return result


def volume_factors(
    stages: Stages, noise: Noise, rng: np.random.Generator, *, together: bool = False
) -> Array:
    """(M,) V/forecast of each stage, 1 in closed periods.

    A session's factor is an order's own, or, with `together`, the same for all orders.
    """
    layout, owner = stages.layout, stages.layout.owner
    markets = 1 if together else len(layout.size)
    session = rng.standard_normal((markets, int(stages.session.max()) + 1))
    log = (
        noise.session * session[np.minimum(owner, markets - 1), stages.session]
        - 0.5 * noise.session**2
    )
    log += noise.bucket * rng.standard_normal(layout.entries) - 0.5 * noise.bucket**2
    return np.where(stages.open, np.exp(log), 1.0)


def in_volume(orders: Orders, factor: Array) -> Orders:
    """The orders where each stage's volume, and so its cap and relaxation, is multiplied."""
    stages = replace(orders.stages, theta=orders.stages.theta * factor)
    return replace(orders, stages=stages, cap=orders.cap * factor)


def fills(orders: Orders, shares: Array, factor: Array | None) -> Array:
    """What fills of planned slices under the caps, (M,); with `factor`, slices scale with it.

    What a cap cuts off waits; nothing beyond what was planned in all is traded.
    """
    layout = orders.stages.layout
    if factor is not None:
        planned = layout.sum(shares)[layout.owner]
        total = np.minimum(layout.cumsum(shares * factor), planned)
        shares = total - layout.before(total, np.zeros(len(layout.size)))
    result = np.zeros(layout.entries)
    waiting = np.zeros(len(layout.size))
    for step in range(int(layout.size.max())):
        here = np.flatnonzero(layout.size > step)
        at = layout.first[here] + step
        wanted = shares[at] + waiting[here]
        result[at] = np.minimum(wanted, orders.cap[at])
        waiting[here] = wanted - result[at]
    return result
