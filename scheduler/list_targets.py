"""The urgency at which a list keeps a risk or a cost budget."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from scheduler.errors import InfeasibleError, NotConvergedError
from scheduler.model.impact import permanent_cost
from scheduler.model.ragged import Array
from scheduler.solve.joint_certificate import certify
from scheduler.transition import Transition, joint_solution, softened

_LEAST, _MOST = 1e-4, 1e4
_PRECISION = 1e-7  # of log U


def list_for_budgets(transition: Transition, *, soften: bool) -> tuple[Transition, tuple[str, ...]]:
    """The list at the urgency that meets its risk or cost budget, if it has one, and notes.

    The standard deviation falls and the expected cost rises with urgency: a root of either along
    the frontier, found by Brent's method, each solve starting from the one before.

    Raises:
        InfeasibleError: a budget out of reach: what is attainable; corridors that cannot hold.
    """
    plan = transition.book.settings.plan
    if plan.risk_budget is not None:
        budget, name, word = plan.risk_budget, "risk_budget", "standard deviation"
    elif plan.cost_budget is not None:
        budget, name, word = plan.cost_budget, "cost_budget", "expected cost"
    else:
        return transition, ()
    notes: tuple[str, ...] = ()
    if not joint_solution(transition, 0.0, 0.0).converged and len(transition.coupling.limited[0]):
        transition, notes = softened(transition, soften=soften)
    frontier = _Frontier(transition, by_risk=name == "risk_budget")
    best = frontier(_MOST) if name == "risk_budget" else frontier(0.0)
    if best > budget:
        raise InfeasibleError(
            f"the list: {name} {budget:g} bps is out of reach; the least {word} attainable is "
            f"{best:.2f} bps"
        )
    return transition.asking(_urgency(frontier, budget, by_risk=name == "risk_budget")), notes


def _urgency(frontier: Callable[[float], float], budget: float, *, by_risk: bool) -> float:
    """The least urgency that keeps a risk budget, or the greatest that keeps a cost budget."""
    from scipy.optimize import brentq  # noqa: PLC0415

    patient, urgent = (0.0, _LEAST), _MOST
    if by_risk and frontier(patient[0]) <= budget:
        return 0.0
    if not by_risk and frontier(urgent) <= budget:
        return urgent
    if (frontier(patient[1]) > budget) is not by_risk:  # the root is nearer to 0 than it matters
        return patient[1] if by_risk else 0.0
    ends = np.log((patient[1], urgent))
    root = brentq(lambda u: frontier(float(np.exp(u))) - budget, *ends, xtol=_PRECISION)
    return float(np.exp(root + (2.0 if by_risk else -2.0) * _PRECISION))


class _Frontier:
    """Standard deviation, or expected cost, of the list's best schedule by urgency; bps."""

    def __init__(self, transition: Transition, *, by_risk: bool) -> None:
        self.transition, self.by_risk = transition, by_risk
        arrays = transition.book.arrays
        lasting = permanent_cost(arrays.market, arrays.quantity)
        self.lasting = float(lasting.sum()) / transition.unit
        self.start: Array | None = None

    def __call__(self, urgency: float) -> float:
        """The unit of the list's money is a basis point of its value."""
        found = joint_solution(self.transition, urgency, 0.0, self.start)
        if not found.converged:
            found = joint_solution(self.transition, urgency, 0.0)
        if not found.converged:
            raise NotConvergedError(
                f"the list's solver stopped at a gap of {found.gap:.1e} at urgency {urgency:.3g}; "
                "give an urgency, longer buckets or wider corridors"
            )
        self.start = found.fractions
        problem = self.transition.problem
        point = certify(problem, self.transition.coupling, found.fractions, urgency=urgency)
        return float(np.sqrt(point.risk)) if self.by_risk else point.cost + self.lasting
