"""Lists planned as one: the joint solver beside the same problem through CVXPY and Clarabel."""

from __future__ import annotations

import resource
import time
from dataclasses import replace

import numpy as np

from benchmarks.problems import random_orders
from benchmarks.reference import solve_reference
from benchmarks.timing import milliseconds, table, timed
from scheduler.coupling import Coupling
from scheduler.problem import Problem, assemble
from scheduler.solve import joint
from scheduler.solve.joint_certificate import certify

# names, buckets, factors, corridors, and whether the reference finishes
_CASES = (
    (100, 26, 10, 1, True),
    (500, 26, 20, 1, True),
    (2_000, 78, 20, 3, False),
    (5_000, 26, 30, 1, False),
)
_SCALING = (
    ("names, 500 to 5,000", (500, 26, 20, 1), (5_000, 26, 20, 1)),
    ("buckets, 26 to 156", (500, 26, 20, 1), (500, 156, 20, 1)),
    ("factors, 5 to 50", (500, 26, 5, 1), (500, 26, 50, 1)),
)
_URGENCY = 0.5


def run() -> None:
    print(_cases())
    print(_exponents())


def random_list(
    names: int, buckets: int, factors: int, corridors: int, *, seed: int = 1, feedback: float = 1.0
) -> tuple[Problem, Coupling]:
    """Buys and sells of nearly equal value under common factors, cash held within 2 % of gross."""
    rng = np.random.default_rng(seed)
    orders = replace(
        random_orders(names, buckets, seed=seed, feedback=feedback),
        specific=np.full(names, 0.5),
        urgency=np.zeros(names),
    )
    side = rng.permutation(np.where(np.arange(names) % 2, 1.0, -1.0))
    value = side * orders.quantity * orders.market.price
    gross = float(np.abs(value).sum())
    loading = rng.normal(0.0, 1.0, (names, factors))
    loading[:, 0] += 2.0
    loading *= (np.sqrt(0.5) * orders.market.vol / np.linalg.norm(loading, axis=1))[:, None]
    weights = np.stack((value, np.abs(value), value * (np.arange(names) % 3 == 0)))[:corridors]
    straight = 1.0 - np.arange(1, buckets + 1) / buckets
    middle = weights.sum(axis=1)[:, None] * straight
    width = np.array([0.02, 0.25, 0.02])[:corridors, None] * gross
    lower, upper = middle - width, middle + width
    lower[:, -1], upper[:, -1] = -np.inf, np.inf
    problem = assemble(orders)
    unit = 1e-4 * gross
    shape = (names, buckets)
    share = np.full(buckets, np.sqrt(0.8125 / buckets))
    coupling = Coupling(
        bucket=np.arange(names * buckets).reshape(shape),
        begin=np.zeros(shape),
        end=np.ones(shape),
        weight=np.broadcast_to(share, shape).copy(),
        loadings=value[:, None] * loading,
        rows=weights,
        constant=np.zeros(corridors),
        lower=lower,
        upper=upper,
    )
    return problem.in_unit(unit), coupling.scaled(unit)


def _cases() -> str:
    """Ours on all lists first, so that the reference's memory does not hide ours."""
    ours = [_ours(*case[:4], feedback=0.0 if case[4] else 1.0) for case in _CASES]
    rows = []
    for (names, buckets, factors, corridors, with_reference), row in zip(_CASES, ours, strict=True):
        seconds, objective, cells = row
        ratio, difference = "not run", ""
        if with_reference:
            problem, coupling = random_list(names, buckets, factors, corridors, feedback=0.0)
            clock = time.perf_counter()
            other = solve_reference(problem, coupling, urgency=_URGENCY)
            ratio = f"{(time.perf_counter() - clock) / seconds:.0f}"
            rival = certify(problem, coupling, other, urgency=_URGENCY)
            difference = f"{objective / rival.objective - 1.0:+.0e}"
        label = f"{names:,} x {buckets}, {factors} factors, {corridors} corridor(s)"
        rows.append((label, *cells, ratio, difference))
    header = (
        "list",
        "time",
        "iterations",
        "gradient steps",
        "gap",
        "peak memory grew by",
        "ratio to CVXPY + Clarabel",
        "objective, ours over theirs",
    )
    return table(
        "Lists planned as one, capped (feedback off where the reference runs, which lacks it):",
        header,
        rows,
    )


def _ours(
    names: int, buckets: int, factors: int, corridors: int, *, feedback: float
) -> tuple[float, float, tuple[str, ...]]:
    """Seconds, objective, and the cells of the table."""
    problem, coupling = random_list(names, buckets, factors, corridors, feedback=feedback)
    before = _peak()
    seconds, found = timed(
        lambda: joint.solve(problem, coupling, urgency=_URGENCY),
        repeats=5 if names <= 500 else 1,
    )
    grown = _peak() - before
    certificate = certify(
        problem,
        coupling,
        np.clip(found.fractions, 0.0, problem.cap),
        urgency=_URGENCY,
        lower_price=found.lower_price,
        upper_price=found.upper_price,
    )
    cells = (
        milliseconds(seconds),
        f"{found.iterations}",
        f"{found.gradient_steps}",
        f"{certificate.gap:.0e}",
        f"{grown:.0f} MB",
    )
    return seconds, certificate.objective, cells


def _exponents() -> str:
    rows = []
    for label, small, large in _SCALING:
        times = []
        for size in (small, large):
            problem, coupling = random_list(*size)
            times.append(
                timed(lambda p=problem, c=coupling: joint.solve(p, c, urgency=_URGENCY), repeats=1)[
                    0
                ]
            )
        growth = max(b / a for a, b in zip(small, large, strict=True))
        exponent = np.log(times[1] / times[0]) / np.log(growth)
        rows.append((label, *map(milliseconds, times), f"{exponent:.2f}"))
    return table("How the time grows:", ("with", "from", "to", "exponent"), rows)


def _peak() -> float:
    """Peak memory of the process so far, MB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
