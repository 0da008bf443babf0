"""Efficient frontiers: the least cost at each risk, by solving for many urgencies at once."""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.figures import Charges, Figures
from scheduler.model.ragged import Array, Index
from scheduler.plan import Plan
from scheduler.solve.schedule import schedule

_POINTS = 24
_LEAST, _MOST = 0.01, 10.0  # urgencies, widened to hold a plan's own
_MARKED = (0.0, 0.1, 1.0, 10.0)
_STEEP = 0.5  # from this urgency on a frontier climbs, and labels fit beside it, not below


SHARED = (
    "Left out: a frontier solves an order alone. This one shares its imbalance with other orders "
    "of its symbol, which are solved as one total."
)
LEFT_OUT = (
    "Left out: a frontier solves an order alone. This one was planned as part of a list, where it "
    "also serves the corridors and the risk of the others, so its point need not lie on that curve."
)


def frontiers(plan: Plan, orders: Index) -> list[dict[str, Any] | None]:
    """What the charts of cost against risk draw, bps of notional; None where nothing is at risk.

    None, too, of orders that share a state. Schedules are before rounding to lots and before
    slices are dropped for `min_slice`.
    """
    book, figures = plan.book, plan.figures
    own = np.array([_own_urgency(plan, order) for order in orders.tolist()])
    urgency = np.array([_urgencies(value) for value in own])
    repeated = np.repeat(orders, urgency.shape[1])
    _, at = book.layout.take(repeated)
    asked = book.arrays.take(repeated).asking(urgency.ravel(), np.zeros(urgency.size))
    solved = schedule(asked, certify=False)
    charges = Charges(book.charges.spread[at], book.charges.fees[at])
    found = Figures(asked, charges, solved.shares)
    bps = 1e4 / found.notional
    cost, risk = (
        (bps * values).reshape(urgency.shape) for values in (found.expected_cost, found.cost_std)
    )
    good = solved.converged.reshape(urgency.shape)
    return [
        None
        if figures.cost_std[order] == 0.0 or not good[i].any() or shares_state(plan, order)
        else _drawn(plan, order, risk[i][good[i]], cost[i][good[i]], urgency[i][good[i]])
        for i, order in enumerate(orders.tolist())
    ]


def shares_state(plan: Plan, order: int) -> bool:
    """Whether an order is solved as one with others of its symbol."""
    pools = plan.book.arrays.pools
    return pools is not None and bool(pools.joined[order])


def _own_urgency(plan: Plan, order: int) -> float:
    """The urgency at which the plan's schedule is optimal: 2 lambda sqrt(Var), lambda implied."""
    risk_aversion = float(plan.summary["orders"][plan.book.names[order]]["risk_aversion"])
    return 2.0 * risk_aversion * float(plan.figures.cost_std[order])


def _urgencies(own: float) -> Array:
    low, high = (min(_LEAST, own / 10.0), max(_MOST, 3.0 * own)) if own > 0.0 else (_LEAST, _MOST)
    return np.sort(np.concatenate(([0.0, own], np.geomspace(low, high, _POINTS - 2))))


def _drawn(plan: Plan, order: int, risk: Array, cost: Array, urgency: Array) -> dict[str, Any]:
    row = plan.summary["orders"][plan.book.names[order]]
    cases = {
        "plan": row,
        "evenly": row["evenly_timed"],
        "by_volume": row["volume_proportional"],
    }
    own = _own_urgency(plan, order)  # whose label the plan's own point would hide
    wanted = [value for value in _MARKED if abs(value - own) > 0.5 * own]
    marked = sorted({int(np.argmin(abs(urgency - value))) for value in wanted})
    risks = [*risk.tolist(), *(case["cost_std_bps"] for case in cases.values())]
    costs = [*cost.tolist(), *(case["expected_cost_bps"] for case in cases.values())]
    points: dict[str, Any] = {
        "frontier_risk": risk.tolist(),
        "frontier_cost": cost.tolist(),
        "frontier_urgency": urgency.tolist(),
        "urgency_risk": risk[marked].tolist(),
        "urgency_cost": cost[marked].tolist(),
        "urgency_text": [f"U = {u:.2g}" for u in urgency[marked]],
        "urgency_side": ["middle right" if u >= _STEEP else "bottom left" for u in urgency[marked]],
        "risk_range": _roomy(risks),
        "frontier_range": _roomy(costs),
    }
    for name, case in cases.items():
        points[f"{name}_risk"] = [case["cost_std_bps"]]
        points[f"{name}_cost"] = [case["expected_cost_bps"]]
    return points


def _roomy(values: list[float]) -> list[float]:
    """A range about the values with room for labels."""
    low, high = min(values), max(values)
    margin = 0.13 * (high - low) or 1.0
    return [low - margin, high + margin]
