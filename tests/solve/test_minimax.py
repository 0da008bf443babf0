"""Least worst regret over several worlds: against a general solver, and what must hold of it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize

from scheduler.model.laws import IMPACT_LAWS
from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.rivals import in_market
from scheduler.solve.convexity import is_convex
from scheduler.solve.feasible import forced_shares
from scheduler.solve.minimax import Minimax, least_worst_regret
from scheduler.solve.optimality import objective_parts
from scheduler.solve.schedule import schedule
from tests.builders import order
from tests.solve.varied import varied

LAWS = ("imbalance", "rate-power", "root-lasting")


def under(orders: Orders, name: str) -> Orders:
    """One order where another published law holds."""
    law, market = IMPACT_LAWS[name], orders.market
    changed = replace(
        market,
        relaxation=np.array([law.relaxation]),
        coefficient=law.coefficient(market.level_rate),
        exponent=np.array([law.exponent]),
    )
    return in_market(orders, changed)


class Task:
    """One order in several worlds, at the lambda its own plan implies."""

    def __init__(self, orders: Orders, laws: tuple[str, ...] = LAWS) -> None:
        plain = schedule(orders, certify=False)
        worlds = Orders.stack([under(orders, law) for law in laws])
        price = np.full(len(laws), plain.risk_aversion[0])
        worlds = worlds.asking(np.zeros(len(laws)), price)
        problem = assemble(worlds)
        self.problem: Problem = problem.in_unit(float(assemble(orders).scale[0]))
        own = schedule(worlds, certify=False)
        assert own.converged.all()
        self.least = self.values(self.problem.fractions(own.shares))
        size = int(self.problem.layout.size[0])
        self.plain = self.problem.fractions(np.tile(plain.shares, len(laws)))[:size]

    def values(self, every: Array) -> Array:
        point = objective_parts(self.problem, every).point
        result: Array = point.cost + self.problem.risk_aversion * point.risk
        return result

    def regret(self, fractions: Array) -> Array:
        return self.values(np.tile(fractions, len(self.least))) - self.least

    def solved(self) -> Minimax:
        return least_worst_regret(self.problem, self.least, self.plain)

    @property
    def convex(self) -> bool:
        return bool(is_convex(self.problem, self.problem.risk_aversion).all())


def slsqp(task: Task) -> float:
    """The same by SLSQP with numerical slopes, in units of the plain schedule's worst regret."""
    size = len(task.plain)
    cap = np.minimum(task.problem.cap[:size], 1.0)
    unit = max(float(task.regret(task.plain).max()), 1e-6)

    def room(v: Array) -> Array:
        return v[-1] - task.regret(v[:-1]) / unit

    begin = np.append(task.plain, task.regret(task.plain).max() / unit)
    found = minimize(
        lambda v: v[-1],
        begin,
        jac=lambda v: np.eye(size + 1)[-1],
        method="SLSQP",
        bounds=[*zip(np.zeros(size), cap, strict=True), (None, None)],
        constraints=[
            {"type": "eq", "fun": lambda v: v[:-1].sum() - 1.0},
            {"type": "ineq", "fun": room},
        ],
        options={"ftol": 1e-12, "maxiter": 300},
    )
    inside = np.clip(found.x[:-1], 0.0, cap)
    missing, left = 1.0 - inside.sum(), cap - inside
    inside = inside + missing * left / left.sum() if missing > 0.0 else inside / (1.0 - missing)
    return float(task.regret(inside).max())


def an_order(seed: int) -> Orders:
    """An order of 1 to 20 % of a day in six buckets, half of them capped; every world convex."""
    rng = np.random.default_rng(seed)
    volume = rng.uniform(0.5, 1.0, 6)
    quantity = float(rng.uniform(1e4, 2e5))
    return order(
        volume / volume.sum(),
        quantity=quantity,
        participation=0.5 if seed % 2 else 0.3,
        urgency=float(rng.choice([0.1, 0.3, 1.0])),
    )


@pytest.mark.parametrize("seed", range(6))
def test_a_general_solver_finds_no_less(seed):
    """Nor does it pass below the proven bound."""
    task = Task(an_order(seed))
    found, other = task.solved(), slsqp(task)
    assert task.convex
    assert found.worst <= other * (1.0 + 1e-5) + 1e-9
    assert found.bound <= other + 1e-9


@pytest.mark.parametrize("seed", [1, 2, 4, 5, 8, 9, 11, 16, 17, 21, 25, 31])
def test_it_is_proven_and_never_worse_than_the_plain_schedule(seed):
    """On orders of every kind; where all worlds are convex the bound meets the worst regret."""
    task = Task(varied(seed))
    found = task.solved()
    assert found.worst <= task.regret(task.plain).max()
    assert found.fractions.min() >= 0.0
    assert (found.fractions <= task.problem.cap[: len(found.fractions)]).all()
    assert found.fractions.sum() == pytest.approx(1.0, abs=1e-9)
    if task.convex:
        assert found.worst - found.bound <= 1e-5 * found.worst + 1e-8 * found.size
    assert np.allclose(found.regret, task.regret(found.fractions), atol=1e-12)


@given(seed=st.integers(0, 10_000))
@settings(max_examples=25, deadline=None)
def test_worlds_that_weigh_are_worst(seed):
    """Complementarity: a world with weight has the worst regret, and weights add up to 1."""
    task = Task(an_order(seed))
    found = task.solved()
    assert found.weights.sum() == pytest.approx(1.0)
    assert (found.weights * (found.worst - found.regret)).max() <= 1e-4 * found.worst + 1e-8


@pytest.mark.parametrize("seed", [0, 3])
def test_the_order_of_worlds_does_not_matter(seed):
    one = Task(an_order(seed)).solved()
    other = Task(an_order(seed), LAWS[::-1]).solved()
    assert other.worst == pytest.approx(one.worst, rel=1e-5)
    assert np.allclose(other.fractions, one.fractions, atol=1e-3)


def test_one_world_has_nothing_to_regret():
    """Its own best schedule is the answer at once."""
    task = Task(an_order(0), ("imbalance",))
    found = task.solved()
    assert found.iterations == 0
    assert np.array_equal(found.fractions, task.plain)


def test_one_world_that_is_another_is_solved():
    """From the plain schedule of one law to the best of another."""
    task = Task(an_order(0), ("root-lasting",))
    assert task.regret(task.plain).max() > 1e-4
    assert task.solved().worst <= 1e-8


def test_ceilings_are_kept():
    """A quarter more done after two of six buckets than is best; that binds in every world."""
    free = an_order(1)
    asked = Task(free).solved().fractions[:2].sum() + 0.25
    due = np.full(6, np.inf)
    due[1] = (1.0 - asked) * free.quantity[0]
    found = Task(replace(free, ceiling=due)).solved()
    assert found.fractions[:2].sum() == pytest.approx(asked, abs=1e-4)
    assert found.fractions[:2].sum() >= asked - 1e-9
    assert found.worst - found.bound <= 1e-5 * found.worst + 1e-8 * found.size


def test_a_signed_reading_is_served():
    """Worlds in which the imbalance changes its sign on the way."""
    task = Task(replace(an_order(2), initial=np.array([-2e4])))
    found = task.solved()
    assert not forced_shares(an_order(2))[1].any()
    assert found.worst < task.regret(task.plain).max()
    assert found.worst - found.bound <= 1e-4 * found.worst + 1e-8 * found.size
