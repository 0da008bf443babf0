"""Aims other than an urgency: the urgency at which each order meets a risk or a cost budget.

Along the frontier the standard deviation falls and the cost rises with U, so each budget is met by
a root in log U, bracketed for all orders at once with warm starts; the end of the bracket that
keeps the budget is taken.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scheduler.figures import Charges, Figures
from scheduler.model.ragged import Array
from scheduler.problem import Orders
from scheduler.solve.pooled import solve_orders
from scheduler.solve.schedule import Solver

MOST_URGENT = 1e5
_LEAST_URGENT = 1e-5
_PRECISION = 1e-6  # of log U


@dataclass(frozen=True)
class Found:
    """Urgency by order; `attainable` is the best value, bps, and `within` whether it suffices."""

    urgency: Array
    within: NDArray[np.bool_]
    attainable: Array


def for_risk_budget(orders: Orders, charges: Charges, budget_bps: float, solver: Solver) -> Found:
    """The least urgency, so the least cost, with cost_std within the budget."""
    search = _Search(orders, charges, _std_bps, budget_bps, solver)
    return search.least()


def for_cost_budget(orders: Orders, charges: Charges, budget_bps: float, solver: Solver) -> Found:
    """The greatest urgency, so the least risk, with the expected cost within the budget."""
    search = _Search(orders, charges, _cost_bps, budget_bps, solver)
    return search.greatest()


def _std_bps(figures: Figures) -> Array:
    pooled = figures.pooled
    return figures.by_order(1e4 * pooled.cost_std / pooled.notional)


def _cost_bps(figures: Figures) -> Array:
    pooled = figures.pooled
    return figures.by_order(1e4 * pooled.expected_cost / pooled.notional)


class _Search:
    def __init__(
        self,
        orders: Orders,
        charges: Charges,
        measure: Callable[[Figures], Array],
        budget: float,
        solver: Solver,
    ) -> None:
        self.orders, self.charges, self.measure = orders, charges, measure
        self.budget, self.solver = budget, solver
        self.shares: Array | None = None

    def value(self, urgency: Array) -> Array:
        """The measured figure of the schedules at these urgencies, bps."""
        aim = self.orders.asking(urgency, np.zeros(len(urgency)))
        solved = solve_orders(aim, start=self.shares, certify=False, solver=self.solver)
        self.shares = solved.shares
        return self.measure(Figures(aim, self.charges, solved.shares))

    def ends(self) -> tuple[Array, Array]:
        """Values at no urgency and at the most."""
        count = len(self.orders)
        patient = self.value(np.zeros(count))
        return patient, self.value(np.full(count, MOST_URGENT))

    def least(self) -> Found:
        patient, urgent = self.ends()
        kept = self._bisect(keeps_when_urgent=True)
        urgency = np.where(patient <= self.budget, 0.0, kept)
        return Found(urgency, urgent <= self.budget, urgent)

    def greatest(self) -> Found:
        patient, urgent = self.ends()
        kept = self._bisect(keeps_when_urgent=False)
        urgency = np.where(urgent <= self.budget, MOST_URGENT, kept)
        return Found(urgency, patient <= self.budget, patient)

    def _bisect(self, keeps_when_urgent: bool) -> Array:
        """The end of the final bracket at which the budget is kept."""
        count = len(self.orders)
        low, high = (np.full(count, np.log(u)) for u in (_LEAST_URGENT, MOST_URGENT))
        while (high - low).max() > _PRECISION:
            middle = 0.5 * (low + high)
            keeps = self.value(np.exp(middle)) <= self.budget
            lower = keeps if keeps_when_urgent else ~keeps
            low, high = np.where(lower, low, middle), np.where(lower, middle, high)
        kept: Array = np.exp(high if keeps_when_urgent else low)
        return kept
