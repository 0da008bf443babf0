"""What each order of a list planned as one adds to its cost and its risk."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.balances import PARTS
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
    rows = plan.summary["orders"].values()
    cost, risk = (np.array([row[name] for row in rows], dtype=float) for name in PARTS)
    return Parts(cost, risk)


def half(parts: Array) -> int:
    """How many of the largest parts it takes for half of the whole; 0 where there is none."""
    total = float(parts.sum())
    if not total > 0.0:
        return 0
    return int((np.cumsum(-np.sort(-parts)) < 0.5 * total).sum()) + 1
