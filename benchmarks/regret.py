"""The least worst regret of one order over three laws, beside SciPy's SLSQP with exact slopes."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import minimize

from benchmarks.problems import random_orders
from benchmarks.timing import milliseconds, paired, table
from scheduler.model.laws import IMPACT_LAWS
from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.rivals import in_market
from scheduler.solve.minimax import least_worst_regret
from scheduler.solve.optimality import objective_parts
from scheduler.solve.schedule import schedule

_LAWS = ("imbalance", "rate-power", "root-lasting")


@dataclass(frozen=True)
class _Task:
    """One order in K worlds, what is best in each, and its plain fractions."""

    problem: Problem
    least: Array
    plain: Array

    def regret(self, fractions: Array) -> tuple[Array, Array]:
        """(K,) regrets and their (K, n) slopes."""
        parts = objective_parts(self.problem, np.tile(fractions, len(self.least)))
        value = parts.point.cost + self.problem.risk_aversion * parts.point.risk
        return value - self.least, parts.gradient.reshape(len(self.least), -1)


def run() -> None:
    rows = []
    for buckets in (26, 78):
        task = _task(random_orders(1, buckets, seed=3))
        ours, theirs, found = paired(
            lambda task=task: least_worst_regret(task.problem, task.least, task.plain),
            lambda task=task: _slsqp(task),
            rounds=3,
            each=10,
        )
        plain, rival = float(task.regret(task.plain)[0].max()), _slsqp(task)
        rows.append(
            (
                str(buckets),
                milliseconds(ours),
                str(found.iterations),
                f"{(found.worst - found.bound) / found.worst:.0e}",
                milliseconds(theirs),
                f"{theirs / ours:.1f}",
                f"{found.worst / rival - 1.0:+.0e}",
                f"{found.worst / plain:.2f}",
            )
        )
    header = (
        "buckets",
        "time",
        "iterations",
        "gap",
        "SLSQP",
        "ratio",
        "worst regret, ours over theirs",
        "over the plain schedule's",
    )
    print(table("Least worst regret over three laws, one order:", header, rows))


def _task(orders: Orders) -> _Task:
    plain = schedule(orders)
    worlds = Orders.stack([_under(orders, law) for law in _LAWS])
    none = np.zeros(len(_LAWS))
    worlds = worlds.asking(none, none + plain.risk_aversion[0])
    problem = assemble(worlds)
    problem = problem.in_unit(float(problem.scale[0]))
    point = objective_parts(problem, problem.fractions(schedule(worlds).shares)).point
    least = point.cost + problem.risk_aversion * point.risk
    every = problem.fractions(np.tile(plain.shares, len(_LAWS)))
    return _Task(problem, least, every[: problem.layout.size[0]])


def _under(orders: Orders, name: str) -> Orders:
    law, market = IMPACT_LAWS[name], orders.market
    changed = replace(
        market,
        relaxation=np.full(1, law.relaxation),
        coefficient=law.coefficient(market.level_rate),
        exponent=np.full(1, law.exponent),
    )
    return in_market(orders, changed)


def _slsqp(task: _Task) -> float:
    """The worst regret where SLSQP ends, over the fractions and the bound t."""
    size = len(task.plain)
    unit = float(task.regret(task.plain)[0].max())
    cap = np.minimum(task.problem.cap[:size], 1.0)
    found = minimize(
        lambda v: v[-1],
        np.append(task.plain, 1.0),
        jac=lambda v: np.eye(size + 1)[-1],
        method="SLSQP",
        bounds=[*zip(np.zeros(size), cap, strict=True), (None, None)],
        constraints=[
            {
                "type": "eq",
                "fun": lambda v: v[:-1].sum() - 1.0,
                "jac": lambda v: np.append(np.ones(size), 0.0),
            },
            {
                "type": "ineq",
                "fun": lambda v: v[-1] - task.regret(v[:-1])[0] / unit,
                "jac": lambda v: np.column_stack(
                    (-task.regret(v[:-1])[1] / unit, np.ones(len(task.least)))
                ),
            },
        ],
        options={"ftol": 1e-9, "maxiter": 1000},
    )
    kept = np.clip(found.x[:-1], 0.0, cap)
    return float(task.regret(kept / kept.sum())[0].max())
