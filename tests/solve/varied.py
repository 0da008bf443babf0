"""Random orders of every kind: sizes, caps, auctions, overnight stages, buckets without volume."""

from __future__ import annotations

import numpy as np

from scheduler.problem import Orders
from tests.builders import order

_ADV = 1e6


def varied(seed: int, fewest: int = 6, most: int = 14) -> Orders:
    """One order of 1e-6 to 3 ADV over `fewest` to `most` stages, urgency 0 to 10.

    Even seeds are capped, every fifth of those only just enough. By seed modulo 4: plain;
    a close auction; two sessions with a night between; buckets without volume.
    """
    rng = np.random.default_rng(seed)
    count = int(rng.integers(fewest, most + 1))
    volume = rng.uniform(0.2, 1.0, count)
    volume /= volume.sum()
    share = volume * rng.uniform(0.5, 1.5, count)
    charge = np.full(count, 0.01)
    is_open, session = np.ones(count, dtype=bool), np.zeros(count, dtype=int)
    kind = rng.integers(4)
    if kind == 1:
        share[-1], charge[-1] = 0.0, 0.0
    elif kind == 2:
        night = count // 2
        volume[night], share[night] = rng.choice([0.0, 0.02]), 0.2
        is_open[night], session[night:] = False, 1
    elif kind == 3:
        volume[rng.choice(count, 2, replace=False)] = 0.0
    quantity = _ADV * float(
        rng.choice([10.0 ** rng.uniform(-6.0, np.log10(3.0)), rng.uniform(0.05, 3.0)])
    )
    cap = np.where(is_open & (volume > 0.0), np.inf, 0.0)
    if seed % 2 == 0:
        cap = np.where(cap > 0.0, volume * rng.uniform(0.7, 1.0, count), 0.0)
        cap[-1] *= 0.4 if kind == 1 else 1.0
        room = 1.0 + 1e-6 if seed % 10 == 0 else float(rng.choice([1.01, 1.3, 2.0, 4.0]))
        cap *= room * quantity / cap.sum()
    elif kind == 1:
        cap[-1] = volume[-1] * _ADV / 9.0
    # at such prices of risk small orders are done at once; scaled, cost and risk are in balance
    urgency = float(rng.choice([0.0, 0.3, 1.0, 3.0, 10.0]))
    root = np.sqrt(min(quantity / _ADV, 1.0))
    urgency *= float(rng.choice([1.0, root, 0.3 * root]))
    return order(
        volume,
        quantity=quantity,
        share=share,
        is_open=is_open,
        session=session,
        cap=cap,
        charge=charge,
        urgency=urgency,
        relaxation=float(rng.choice([0.02, 0.05, 0.3, 2.0])),
        exponent=float(rng.choice([0.5, 0.5, 0.6, 1.0])),
    )
