"""Independent orders: the interior solver beside the same problem through CVXPY and Clarabel."""

from __future__ import annotations

import numpy as np

from benchmarks.problems import random_orders
from benchmarks.timing import clarabel_seconds, milliseconds, paired, table, timed
from scheduler.problem import Problem, assemble
from scheduler.solve import conic, interior
from scheduler.solve.optimality import Parts, duality_gap, objective, objective_parts
from scheduler.solve.schedule import schedule

_SINGLE = ((26, True), (78, False), (78, True), (390, False), (390, True))
_BATCH = (100, 1_000, 10_000)


def run() -> None:
    print(_single())
    print(_feedback())
    print(_batches())
    print(_warm())


def _value(problem: Problem, fractions: np.ndarray) -> tuple[float, Parts]:
    parts = objective_parts(problem, fractions)
    return float(objective(problem, parts)[0]), parts


def _single() -> str:
    """Like for like: the term that conic solvers lack (own imbalance in the variance) is off."""
    rows = []
    for buckets, capped in _SINGLE:
        orders = random_orders(1, buckets, capped=capped, feedback=0.0)
        problem = assemble(orders)
        kept: list[interior.Solution] = []
        ours, total, solution = paired(
            lambda o=orders: interior.solve(assemble(o)),
            lambda p=problem, k=kept: k.append(conic.solve(p)),
        )
        reference = kept[-1]
        alone = min(clarabel_seconds(lambda p=problem: conic.solve(p)) for _ in range(3))
        value, parts = _value(problem, solution.fractions)
        other, _ = _value(problem, reference.fractions)
        gap = duality_gap(problem, parts, solution.fractions, solution.ceiling_price) / parts.size
        rows.append(
            (
                f"{buckets}{', capped' if capped else ''}",
                milliseconds(ours),
                f"{int(solution.iterations[0])}",
                f"{gap[0]:.0e}",
                milliseconds(total),
                milliseconds(alone),
                f"{total / ours:.0f}",
                f"{alone / ours:.1f}",
                f"{(value - other) / parts.size[0]:+.0e}",
            )
        )
    header = (
        "buckets",
        "interior",
        "iterations",
        "gap",
        "CVXPY + Clarabel",
        "Clarabel alone",
        "ratio to CVXPY",
        "ratio to Clarabel",
        "objective, ours less theirs",
    )
    return table(
        "One order, U = 0.3, feedback off in both (like for like); best of runs taken in turns:",
        header,
        rows,
    )


def _feedback() -> str:
    """The whole problem: the reference needs several rounds of majorisation."""
    rows = []
    for buckets in (26, 78):
        orders = random_orders(1, buckets)
        problem = assemble(orders)
        kept: list[interior.Solution] = []
        ours, total, solution = paired(
            lambda o=orders: interior.solve(assemble(o)),
            lambda p=problem, k=kept: k.append(conic.solve(p)),
            rounds=2,
        )
        reference = kept[-1]
        value, parts = _value(problem, solution.fractions)
        other, _ = _value(problem, reference.fractions)
        rows.append(
            (
                f"{buckets}",
                milliseconds(ours),
                milliseconds(total),
                f"{total / ours:.0f}",
                f"{(value - other) / parts.size[0]:+.0e}",
            )
        )
    header = ("buckets", "interior", "majorised rounds", "ratio", "objective, ours less theirs")
    return table("One order, the whole problem, feedback on:", header, rows)


def _batches() -> str:
    reference, _ = timed(
        lambda: conic.solve(assemble(random_orders(1, 78, feedback=0.0))), repeats=3
    )
    rows = []
    for count in _BATCH:
        orders = random_orders(count, 78)
        seconds, solved = timed(lambda o=orders: schedule(o), repeats=3 if count < 5_000 else 1)
        each = seconds / count
        rows.append(
            (
                f"{count:,} x 78",
                milliseconds(seconds),
                milliseconds(each),
                f"{solved.iterations.mean():.1f} (most {solved.iterations.max()})",
                f"{solved.gap.max():.0e}",
                f"{reference / each:.0f}",
            )
        )
    header = ("orders", "time", "an order", "iterations", "worst gap", "ratio to CVXPY, an order")
    return table(
        "Batches with certificates, capped, feedback on (the ratio is to CVXPY + Clarabel on one "
        "such order with feedback off):",
        header,
        rows,
    )


def _warm() -> str:
    rows = []
    for buckets in (78, 390):
        problem = assemble(random_orders(100, buckets))
        cold = interior.solve(problem)
        nearby = assemble(random_orders(100, buckets, urgency=0.33))
        again = interior.solve(nearby, start=cold.fractions)
        fresh = interior.solve(nearby)
        share = again.iterations.mean() / fresh.iterations.mean()
        rows.append(
            (
                f"{buckets}",
                f"{fresh.iterations.mean():.1f}",
                f"{again.iterations.mean():.1f}",
                f"{share:.0%}",
            )
        )
    header = ("buckets", "cold iterations", "warm iterations", "warm / cold")
    return table("Warm start after urgency rose by a tenth, 100 orders:", header, rows)
