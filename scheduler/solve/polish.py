"""The last digits of a list's small names, each solved alone at the list's prices.

The list's gap is relative to the list: of a name a millionth of its size it says nothing. With the
factors' exposures and the corridors' multipliers held, names are independent and what ties them is
linear in each,

    minimise  C_i + lambda R_i + (slope of factors and corridors)'y_i,

so one batch of the interior solver, whose tolerance is each order's own, settles those names. They
are so small that exposures and corridors do not notice.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve import interior
from scheduler.solve.evaluate import Evaluator
from scheduler.solve.joint import JointSolution
from scheduler.solve.optimality import linear_minimum, total_gradient

_WANTED = 1e-6  # gap of a name, relative to its own impact and lambda Var
_SMALL = 1e-4  # of the list's impact and lambda Var: names above it the list's gap speaks of


def polish(
    problem: Problem,
    coupling: Coupling,
    solution: JointSolution,
    *,
    urgency: float = 0.0,
    risk_aversion: float = 0.0,
) -> JointSolution:
    """The solution with small names solved at the list's prices, where that lowers their own gap.

    Parameters
    ----------
    urgency, risk_aversion : U, and lambda in 1/unit, of the whole list.
    """
    if not solution.converged:
        return solution
    aim, price = (urgency, risk_aversion), solution.upper_price - solution.lower_price
    fractions = np.clip(solution.fractions, 0.0, problem.cap)
    names = _alone(problem, coupling, fractions, aim, price)
    rough = (names.gap > _WANTED * names.size) & names.small
    rough[problem.layout.owner[coupling.spans.first]] = False  # a span is more than a price
    small = np.flatnonzero(rough)
    if not len(small):
        return solution
    part, (_, at) = problem.take(small), problem.layout.take(small)
    apart = replace(
        part,
        charge=part.charge + names.linear[at],
        urgency=np.zeros(len(small)),
        risk_aversion=np.full(len(small), names.risk_aversion),
    )
    tried = fractions.copy()
    tried[at] = np.clip(interior.solve(apart, start=fractions[at]).fractions, 0.0, part.cap)
    better = _alone(problem, coupling, tried, aim, price).gap < names.gap
    return replace(
        solution, fractions=np.where(better[problem.layout.owner], tried, solution.fractions)
    )


@dataclass(frozen=True)
class _Names:
    """The names at the list's prices: (N,) linear gaps and sizes; (M,) slope of what ties them."""

    gap: Array
    size: Array
    linear: Array
    risk_aversion: float

    @property
    def small(self) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
        result: np.ndarray[tuple[int], np.dtype[np.bool_]] = self.size < _SMALL * self.size.sum()
        return result


def _alone(
    problem: Problem,
    coupling: Coupling,
    fractions: Array,
    aim: tuple[float, float],
    price: Array,
) -> _Names:
    layout, buckets = problem.layout, problem.layout.entries
    x = layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size)))
    after = layout.scan(problem.decay, problem.gain * fractions, problem.initial)
    point = Evaluator(problem).point(x, layout.before(after, problem.initial), fractions)
    exposure = coupling.exposures(x, fractions)
    risk = float(point.risk.sum() + np.vdot(exposure, exposure))
    aversion = aim[1] + (0.5 * aim[0] / np.sqrt(risk) if risk > 0.0 else 0.0)
    tied = np.zeros((3, buckets))
    for by_x, by_y in (
        coupling.pull_exposures(2.0 * aversion * exposure, buckets),
        coupling.pull_levels(price, buckets),
    ):
        tied[0] += by_x
        tied[2] += by_y
    linear = total_gradient(problem, tied)
    slope = linear + total_gradient(problem, point.cost_slope + aversion * point.risk_slope)
    gap = layout.sum(slope * fractions) - linear_minimum(problem, slope)[0]
    return _Names(gap, point.avoidable + aversion * point.risk, linear, aversion)
