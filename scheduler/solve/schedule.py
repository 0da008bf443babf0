"""The driver: independent orders in, schedules with certificates out.

Orders are grouped by the quadrature their buckets need, solved in cache-sized batches, tested for
convexity at their implied risk aversion, and solved again by a homotopy where that is not proven.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from scheduler.model.quadrature import node_class
from scheduler.model.ragged import Array, Index
from scheduler.problem import Orders, Problem, assemble
from scheduler.solve import convexity, interior
from scheduler.solve.feasible import forced_shares
from scheduler.solve.optimality import Parts, duality_gap, kkt_residual, objective, objective_parts
from scheduler.solve.rows import check_forced

_BATCH_BUCKETS = 16_000  # about what fits the caches
_HOMOTOPY = (0.0, 0.1, 0.3, 1.0)

Solver = Callable[..., interior.Solution]
Progress = Callable[[int, int], None]


class Status(Enum):
    """How far a schedule is known to be the best; the value is advice for a reader."""

    PROVEN = "the global optimum, to the gap shown"
    BOUNDED = "no schedule is better than this one by more than the gap shown"
    LOCAL = "the best found; a better one may exist"


@dataclass(frozen=True)
class Schedule:
    """Schedules of N orders over all their M stages, with certificates; arrays by order.

    shares : (M,) slices before rounding.
    risk_aversion : (N,) implied lambda, 1/currency.
    status : certificate. gap : relative to impact + lambda Var; a duality gap where proven, the
    distance to the lower bound where bounded. kkt_residual : largest relative complementarity.
    converged : whether the solver met its tolerance. seconds : an order's part of its batch.
    """

    shares: Array
    risk_aversion: Array
    status: list[Status]
    gap: Array
    kkt_residual: Array
    converged: NDArray[np.bool_]
    iterations: Index
    seconds: Array


def schedule(
    orders: Orders,
    *,
    start: Array | None = None,
    certify: bool = True,
    solver: Solver = interior.solve,
    progress: Progress | None = None,
) -> Schedule:
    """Solve every order; each must be feasible (`scheduler.solve.feasible`).

    Parameters
    ----------
    start : (M,) earlier slices, for warm starts.
    certify : whether to look for bounds where the optimum is not proven.
    progress : called with orders solved and orders in all.
    """
    count = len(orders)
    result = Schedule(
        np.zeros(orders.stages.layout.entries),
        np.zeros(count),
        [Status.PROVEN] * count,
        np.zeros(count),
        np.zeros(count),
        np.ones(count, dtype=np.bool_),
        np.zeros(count, dtype=np.int64),
        np.zeros(count),
    )
    forced, known = forced_shares(orders)
    check_forced(orders, forced, known)
    result.shares[:] = forced
    solved_so_far = int(known.sum())
    for batch in _batches(orders, np.flatnonzero(~known)):
        clock = time.perf_counter()
        part = orders.take(batch)
        _, at = orders.stages.layout.take(batch)
        solved = _solve_batch(part, None if start is None else start[at], certify, solver)
        result.shares[at] = solved.shares
        for name in ("risk_aversion", "gap", "kkt_residual", "converged", "iterations"):
            getattr(result, name)[batch] = getattr(solved, name)
        for order, status in zip(batch, solved.status, strict=True):
            result.status[order] = status
        result.seconds[batch] = (time.perf_counter() - clock) / len(batch)
        solved_so_far += len(batch)
        if progress is not None:
            progress(solved_so_far, count)
    return result


def _batches(orders: Orders, which: Index) -> Iterator[Index]:
    """Orders of one quadrature rule and one sign of imbalance, in batches."""
    layout = orders.stages.layout
    kind = 2.0 * node_class(layout.max(orders.stages.theta)) + (orders.initial < 0.0)
    has_ceiling = layout.min(orders.ceiling) < np.inf
    kind = 2.0 * kind + has_ceiling
    for value in np.unique(kind[which]):
        group = which[kind[which] == value]
        batch = np.cumsum(layout.size[group]) // _BATCH_BUCKETS
        yield from np.split(group, np.flatnonzero(np.diff(batch)) + 1)


def _solve_batch(orders: Orders, start: Array | None, certify: bool, solver: Solver) -> Schedule:
    problem = assemble(orders)
    first = None if start is None else problem.fractions(start)
    solution = solver(problem, start=first)
    if first is not None and not solution.converged.all():
        solution = solver(problem)
    solution, parts, convex = _best(problem, solution, solver)
    prices = solution.ceiling_price, solution.row_price
    gap = duality_gap(problem, parts, solution.fractions, *prices) / parts.size
    status = [Status.PROVEN if proven else Status.LOCAL for proven in convex]
    if certify and not convex.all():
        open_ = np.flatnonzero(~convex)
        gap[open_] = _bound(problem, parts, solution.fractions, open_)
        for order in open_:
            status[order] = Status.BOUNDED if np.isfinite(gap[order]) else Status.LOCAL
    return Schedule(
        problem.shares(solution.fractions, orders.stages.layout.entries),
        parts.risk_aversion / problem.scale,
        status,
        gap,
        kkt_residual(problem, parts, solution.fractions, *prices),
        solution.converged,
        solution.iterations,
        np.zeros(len(orders)),
    )


def _best(
    problem: Problem, solution: interior.Solution, solver: Solver
) -> tuple[interior.Solution, Parts, NDArray[np.bool_]]:
    """The solution, with orders not proven convex replaced where a homotopy does better."""
    parts = objective_parts(problem, solution.fractions)
    convex = convexity.is_convex(problem, parts.risk_aversion) & solution.converged
    doubtful = np.flatnonzero(~convex)
    if not len(doubtful) or solver is not interior.solve:  # only the interior solver takes starts
        return solution, parts, convex
    part = problem.take(doubtful)
    _, at = problem.layout.take(doubtful)
    best = interior.Solution(
        solution.fractions[at],
        solution.ceiling_price[at],
        solution.iterations[doubtful],
        solution.converged[doubtful],
    )
    for rival in _rivals(part, solver):
        best = _better(part, best, rival)
    fractions, price = solution.fractions.copy(), solution.ceiling_price.copy()
    converged, iterations = solution.converged.copy(), solution.iterations.copy()
    fractions[at], price[at] = best.fractions, best.ceiling_price
    converged[doubtful], iterations[doubtful] = best.converged, best.iterations
    solution = interior.Solution(fractions, price, iterations, converged)
    parts = objective_parts(problem, fractions)
    return solution, parts, convexity.is_convex(problem, parts.risk_aversion) & converged


def _rivals(problem: Problem, solver: Solver) -> Iterator[interior.Solution]:
    """Solutions from other starts: a homotopy, along the volume, and evenly spread.

    The homotopy finds the best minimum nearly always; in 3,000 random orders the other two made
    up for the four it missed, all of 40 relaxation volumes and more at high urgency.
    """
    yield _homotopy(problem, solver)
    layout = problem.layout
    for pattern in (problem.theta, np.ones(layout.entries)):
        total = layout.sum(pattern)
        usable = np.where((total > 0.0)[layout.owner], pattern, 1.0)
        yield solver(problem, start=usable / layout.sum(usable)[layout.owner], near=False)


def _better(
    problem: Problem, one: interior.Solution, other: interior.Solution
) -> interior.Solution:
    """Order by order the converged solution of lower objective; iterations add up."""
    values = [objective(problem, objective_parts(problem, s.fractions)) for s in (one, other)]
    take = other.converged & (np.logical_not(one.converged) | (values[1] < values[0]))
    by_bucket = take[problem.layout.owner]
    return interior.Solution(
        np.where(by_bucket, other.fractions, one.fractions),
        np.where(by_bucket, other.ceiling_price, one.ceiling_price),
        one.iterations + other.iterations,
        one.converged | other.converged,
    )


def _homotopy(problem: Problem, solver: Solver) -> interior.Solution:
    """Scale the non-convex term up from nothing, each solve starting from the one before."""
    steps = np.zeros(len(problem.quantity), dtype=np.int64)
    start = None
    for share in _HOMOTOPY:
        solution = solver(problem, feedback_share=share, start=start)
        steps += solution.iterations
        start = solution.fractions
    return replace(solution, iterations=steps)


def _bound(problem: Problem, parts: Parts, fractions: Array, which: Index) -> Array:
    """Relative distance of C + lambda R to its lower bound."""
    part = problem.take(which)
    _, at = problem.layout.take(which)
    risk_aversion = parts.risk_aversion[which]
    least = convexity.lower_bound(part, risk_aversion, fractions[at])
    value = parts.point.cost[which] + risk_aversion * parts.point.risk[which]
    result: Array = np.maximum(value - least, 0.0) / parts.size[which]
    return result
