"""Random problems of given sizes: a day's order with a U-shaped day, sizes and caps at random."""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Ragged
from scheduler.model.stages import Market, Stages
from scheduler.problem import Orders


def random_orders(
    count: int,
    buckets: int,
    *,
    seed: int = 1,
    capped: bool = True,
    feedback: float = 1.0,
    urgency: float = 0.3,
) -> Orders:
    """Orders of 1 % to 10 % of a day's volume over one session, at most 25 % of the volume."""
    rng = np.random.default_rng(seed)
    layout = Ragged(np.full(count, buckets))
    time = (np.arange(buckets) + 0.5) / buckets
    shape = 0.7 + 1.2 * (2.0 * time - 1.0) ** 2
    volume = np.tile(shape, count) * rng.uniform(0.8, 1.2, layout.entries)
    volume /= layout.sum(volume)[layout.owner]
    variance = np.tile(shape[::-1], count) * rng.uniform(0.8, 1.2, layout.entries)
    variance *= 0.8125 / layout.sum(variance)[layout.owner]
    adv = 10.0 ** rng.uniform(5.5, 7.0, count)
    ones = np.ones(count)
    market = Market(
        price=rng.uniform(10.0, 200.0, count),
        adv=adv,
        vol=rng.uniform(0.01, 0.04, count),
        level_rate=0.25 * ones,
        relaxation=0.05 * ones,
        coefficient=np.sqrt(2.0) * ones,
        exponent=0.5 * ones,
        feedback=feedback * ones,
        permanent=0.0 * ones,
    )
    stages = Stages(
        layout,
        volume / 0.05,
        variance,
        np.ones(layout.entries, dtype=np.bool_),
        np.zeros(layout.entries, dtype=np.int64),
    )
    cap = volume * adv[layout.owner] / 3.0 if capped else np.full(layout.entries, np.inf)
    return Orders(
        stages=stages,
        market=market,
        quantity=rng.uniform(0.01, 0.1, count) * adv,
        initial=0.0 * ones,
        cap=cap,
        charge=np.zeros(layout.entries),
        ceiling=np.full(layout.entries, np.inf),
        urgency=urgency * ones,
        risk_aversion=0.0 * ones,
    )
