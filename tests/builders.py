"""Orders in the model's units from a few plain numbers, and how tests solve and price them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from scheduler.model.impact import impact_cost
from scheduler.model.ragged import Array, Ragged
from scheduler.model.risk import variance
from scheduler.model.stages import Market, Stages
from scheduler.problem import Orders, assemble
from scheduler.solve.interior import solve

_MARKET = {
    "price": 50.0,
    "adv": 1e6,
    "vol": 0.02,
    "level_rate": 0.25,
    "relaxation": 0.05,
    "coefficient": np.sqrt(2.0),
    "exponent": 0.5,
    "feedback": 1.0,
    "permanent": 0.0,
}


def market(**parameters: float) -> Market:
    """One name's market: the defaults of the model with some parameters replaced."""
    return Market(**{name: np.array([float(v)]) for name, v in (_MARKET | parameters).items()})


def order(
    volume: Sequence[float],
    *,
    quantity: float = 5e4,
    initial: float = 0.0,
    share: Sequence[float] | None = None,
    is_open: Sequence[bool] | None = None,
    session: Sequence[int] | None = None,
    participation: float = 1.0,
    cap: Sequence[float] | None = None,
    charge: float | Sequence[float] = 0.0,
    ceiling: Sequence[float] | None = None,
    urgency: float = 0.0,
    risk_aversion: float = 0.0,
    **parameters: float,
) -> Orders:
    """One order over stages in time order.

    volume : sessions of volume of each bucket; of a closed period, its relaxation omega.
    share : variance shares h; unset, as the volume. participation : own over total, 1 = no cap.
    cap : shares, in place of participation; without volume, or closed, 0 unless given.
    """
    name = market(**parameters)
    v = np.asarray(volume, dtype=float)
    opened = np.ones(len(v), dtype=bool) if is_open is None else np.array(is_open)
    if cap is None:
        m = participation
        most = v * name.adv * m / (1.0 - m) if m < 1.0 else np.where(v > 0.0, np.inf, 0.0)
        limit = np.where(opened, most, 0.0)
    else:
        limit = np.array(cap, dtype=float)
    stages = Stages(
        Ragged(np.array([len(v)])),
        v / name.relaxation,
        np.array(v if share is None else share, dtype=float),
        opened,
        np.zeros(len(v), dtype=np.int64) if session is None else np.array(session),
    )
    return Orders(
        stages,
        name,
        np.array([float(quantity)]),
        np.array([float(initial)]),
        limit,
        np.full(len(v), charge) if np.isscalar(charge) else np.array(charge, dtype=float),
        np.full(len(v), np.inf) if ceiling is None else np.array(ceiling, dtype=float),
        np.array([float(urgency)]),
        np.array([float(risk_aversion)]),
    )


def join(orders: Sequence[Orders]) -> Orders:
    """Several orders laid end to end as one batch."""
    return Orders.stack(orders)


def schedule(orders: Orders, **options: Any) -> Array:
    """The optimal slices in shares, (M,); asserts that the solver met its tolerance."""
    problem = assemble(orders)
    solution = solve(problem, **options)
    assert solution.converged.all()
    return problem.shares(solution.fractions, orders.stages.layout.entries)


def cost_of(orders: Orders, shares: Array) -> Array:
    """Expected cost of each order in currency, from the model's functions."""
    impact = impact_cost(orders.stages, orders.market, shares, orders.initial)
    return orders.stages.layout.sum(impact + orders.charge * shares)


def variance_of(orders: Orders, shares: Array) -> Array:
    """Variance of each order's cost in currency squared, from the model's functions."""
    base, own = variance(orders.stages, orders.market, orders.quantity, shares, orders.initial)
    return orders.stages.layout.sum(base + own)
