"""Orders with and without a shared state: every pool is solved as one total, then divided.

Most totals serve their orders' windows of themselves, and are then optimal as they are: with the
deadlines as ceilings a pool is one order. Where a window in the middle or a late start asks for
more, the pool is solved again with all its windows as spans.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scheduler.coupling import Coupling
from scheduler.model.pools import Pools
from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.solve import interior, joint, joint_certificate
from scheduler.solve.schedule import Progress, Schedule, Solver, Status, schedule
from scheduler.solve.windows import Needs, divide, missing, needs, pieces, spans_of

_SERVED = 1e-9  # of the quantity: a window that lacks less is served


def solve_orders(
    orders: Orders,
    *,
    start: Array | None = None,
    certify: bool = True,
    solver: Solver = interior.solve,
    progress: Progress | None = None,
) -> Schedule:
    """`schedule`, for orders that may share states.

    Parameters
    ----------
    start : (M,) earlier slices of the orders.
    """
    pools = orders.pools
    if pools is None:
        return schedule(orders, start=start, certify=certify, solver=solver, progress=progress)
    asked = needs(orders, pieces(orders, np.flatnonzero(pools.joined)))
    totals = with_deadlines(orders.pooled, asked)
    begin = None if start is None else pools.by_stage(start)
    solved = schedule(totals, start=begin, certify=certify, solver=solver, progress=progress)
    short = missing(asked, solved.shares) > _SERVED * totals.quantity[asked.pool]
    for pool in np.unique(asked.pool[short]).tolist():
        _solve_with_spans(totals, asked, pool, solved, solver)
    return divided(orders, pools, solved)


def with_deadlines(totals: Orders, asked: Needs) -> Orders:
    """Totals with what is needed from a pool's first stage on as ceilings."""
    layout = totals.stages.layout
    due = np.zeros(layout.entries)
    deadline = asked.first <= _first_usable(totals)[asked.pool]
    np.maximum.at(due, asked.last[deadline], asked.least[deadline])
    quantity = totals.quantity[layout.owner]
    ceiling = np.where(due > 0.0, np.maximum(quantity - due, 0.0), np.inf)
    return replace(totals, ceiling=np.minimum(totals.ceiling, ceiling))


def _first_usable(totals: Orders) -> Array:
    layout = totals.stages.layout
    return layout.min(np.where(totals.cap > 0.0, np.arange(layout.entries), np.inf))


def _solve_with_spans(
    totals: Orders, asked: Needs, pool: int, solved: Schedule, solver: Solver
) -> None:
    """Solve one pool again with its windows, and put the answer into `solved`."""
    layout = totals.stages.layout
    offset, end = int(layout.first[pool]), int(layout.last[pool]) + 1
    one = totals.take(np.array([pool]))
    problem = assemble(replace(one, ceiling=np.full_like(one.ceiling, np.inf)))
    mine = asked.take(np.flatnonzero(asked.pool == pool))
    none = np.zeros(len(mine.pool), dtype=np.int64)
    shifted = Needs(none, mine.first - offset, mine.last - offset, mine.least)
    coupling = replace(_nothing(), spans=spans_of(shifted, problem))
    urgency, risk_aversion = float(problem.urgency[0]), float(problem.risk_aversion[0])
    solve = joint.solve if solver is interior.solve else _conic_list
    found = solve(problem, coupling, urgency=urgency, risk_aversion=risk_aversion)
    fractions = np.clip(found.fractions, 0.0, problem.cap)
    proof = joint_certificate.certify(
        problem,
        coupling,
        fractions,
        urgency=urgency,
        risk_aversion=risk_aversion,
        lower_price=found.lower_price,
        upper_price=found.upper_price,
    )
    solved.shares[offset:end] = problem.shares(fractions, end - offset)
    solved.risk_aversion[pool] = proof.risk_aversion / problem.scale[0]
    solved.status[pool] = Status.PROVEN if proof.convex.all() else Status.LOCAL
    solved.gap[pool], solved.kkt_residual[pool] = proof.gap, proof.kkt_residual
    solved.converged[pool] = found.converged
    solved.iterations[pool] += found.iterations


def _conic_list(problem: Problem, coupling: Coupling, **aim: float) -> joint.JointSolution:
    from scheduler.solve import conic_list  # noqa: PLC0415 - loads cvxpy

    return conic_list.solve(
        problem, coupling, urgency=aim["urgency"], risk_aversion=aim["risk_aversion"]
    )


def _nothing() -> Coupling:
    """No factors and no corridors over one name."""
    none, empty = np.zeros((1, 0), dtype=np.int64), np.zeros((1, 0))
    rows, bounds = np.zeros((0, 1)), np.zeros((0, 0))
    return Coupling(none, empty, empty, empty, empty, rows, np.zeros(0), bounds, bounds)


def divided(orders: Orders, pools: Pools, solved: Schedule) -> Schedule:
    """The schedules of pools as those of their orders; each has its pool's certificate."""
    of = pools.of
    return Schedule(
        divide(orders, solved.shares),
        solved.risk_aversion[of],
        [solved.status[pool] for pool in of],
        solved.gap[of],
        solved.kkt_residual[of],
        solved.converged[of],
        solved.iterations[of],
        solved.seconds[of],
    )
