"""What each order of a list planned as one adds to its cost and its risk."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.balances import risk_shares
from scheduler.model.ragged import Array
from scheduler.plan import Plan


@dataclass(frozen=True)
class Parts:
    """Each order's part of the list's expected cost (nan if that is not above 0) and variance."""

    cost: Array
    risk: Array


def parts_of(plan: Plan) -> Parts | None:
    """None for orders planned alone."""
    if plan.transition is None:
        return None
    figures, pooled = plan.figures, plan.figures.pooled
    cost, risk = figures.expected_cost, figures.by_order(risk_shares(plan.transition, pooled))
    if figures.orders.pools is not None:  # a symbol's part is its orders' by what each has at risk
        of, std = figures.orders.pools.of, figures.cost_std
        risk = risk * std / np.maximum(np.bincount(of, std)[of], 1e-300)
    total = float(cost.sum())
    return Parts(cost / total if total > 0.0 else np.full(len(cost), np.nan), risk)


def half(parts: Array) -> int:
    """How many of the largest parts it takes for half of the whole; 0 where there is none."""
    total = float(parts.sum())
    if not total > 0.0:
        return 0
    return int((np.cumsum(-np.sort(-parts)) < 0.5 * total).sum()) + 1
