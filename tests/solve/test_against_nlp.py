"""Never worse than a general-purpose nonlinear solver on the exact objective.

The problem is convex where the sufficient condition written out in `convex` holds at the implied
risk aversion; there one cold solve must match. Elsewhere there can be several local minima, and the
best of five nonlinear starts is what the search over minima has to reach.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.solve.interior import solve
from scheduler.solve.optimality import implied_risk_aversion, objective_parts
from scheduler.solve.schedule import schedule
from tests.solve.nonlinear import Exact, best_nonlinear
from tests.solve.varied import varied

_WITHIN = 1e-6
# orders of 40 to 90 L at high urgency: what is traded at once and what is left for later differs
# from minimum to minimum; found among 3,000 seeds
_SEVERAL_MINIMA = (15, 1283, 1989, 2048)


def convex(orders: Orders, risk_aversion: float) -> bool:
    """Whether at every point of the path C + lambda Var is certain to be convex in (x, |Z|):

    lambda <= c theta (1+delta) delta |Z|^{delta-1} (sigma^2 + phi sigma_0^2 |Z|/L) L^2
              / (2 p^2 h phi^2 sigma_0^4 x^2).
    """
    name = {key: float(value[0]) for key, value in vars(orders.market).items()}
    quantity, start = float(orders.quantity[0]), abs(float(orders.initial[0]))
    delta, phi = name["exponent"], name["feedback"]
    ground = name["vol"] ** 2 / (1.0 + 2.0 * name["level_rate"])
    reach = name["relaxation"] * name["adv"]
    scale = name["price"] * name["coefficient"] * ground**0.5 * name["adv"] ** -delta
    caps = np.minimum(orders.cap, quantity)
    level = 0.0
    for t, theta in enumerate(orders.stages.theta):
        left, share = min(quantity, caps[t:].sum()), orders.stages.variance[t]
        highest = min(level + caps[t], quantity) + start
        level = np.exp(-theta) * level + (caps[t] * (1.0 - np.exp(-theta)) / theta if theta else 0)
        if not orders.stages.open[t] or share * phi * risk_aversion * left * highest == 0.0:
            continue
        for z in highest * np.linspace(1e-6, 1.0, 400):
            x = min(left, quantity + start - z)
            supply = scale * theta * (1.0 + delta) * delta * z ** (delta - 1.0)
            supply *= (name["vol"] ** 2 + phi * ground * z / reach) * reach**2
            demand = 2.0 * name["price"] ** 2 * share * phi**2 * ground**2 * x**2
            if risk_aversion * demand > supply:
                return False
    return True


def implied(problem: Problem, fractions: Array) -> float:
    """lambda + U/(2 sqrt Var) at a schedule, 1/currency."""
    risk = objective_parts(problem, fractions).point.risk
    return float((implied_risk_aversion(problem, risk) / problem.scale)[0])


@lru_cache(maxsize=64)
def solved(seed: int) -> tuple[Orders, Array, bool]:
    """An order, its schedule, and whether one cold solve was all it took, the problem convex."""
    orders = varied(seed)
    problem = assemble(orders)
    solution = solve(problem)
    if convex(orders, implied(problem, solution.fractions)):
        assert solution.converged.all()
        return orders, solution.fractions, True
    return orders, problem.fractions(schedule(orders).shares), False


def compare(seed: int) -> None:
    orders, fractions, certain = solved(seed)
    exact = Exact(orders)
    assert np.all(fractions >= 0.0)
    assert np.all(fractions <= exact.cap * (1.0 + 1e-12))
    assert abs(fractions.sum() - 1.0) < 1e-12
    least = best_nonlinear(exact, seed)
    assert exact.value(fractions) <= least * (1.0 + _WITHIN)
    # the comparison means something: the rival is a solution too, or stuck in another minimum
    assert not certain or least <= exact.value(fractions) * (1.0 + _WITHIN)


@pytest.mark.parametrize("seed", range(40))
def test_never_worse_than_five_nonlinear_starts(seed: int) -> None:
    """Within 1e-6 of the best of them, on the exact objective, caps and sum kept."""
    compare(seed)


@pytest.mark.parametrize("seed", _SEVERAL_MINIMA)
def test_best_of_several_local_minima_is_found(seed: int) -> None:
    """Large orders at high urgency, on which the homotopy alone misses the best by 6e-5 to 4e-2."""
    compare(seed)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(2000, 2200))
def test_never_worse_on_two_hundred_more(seed: int) -> None:
    compare(seed)


def test_both_kinds_of_problem_are_among_the_forty() -> None:
    """Convex and not; capped and not; auctions, nights, no volume; all sizes and urgencies."""
    orders = [varied(seed) for seed in range(40)]
    certain = [solved(seed)[2] for seed in range(40)]
    assert 10 <= sum(certain) <= 30
    size = np.array([o.quantity[0] / o.market.adv[0] for o in orders])
    assert size.min() < 1e-5
    assert size.max() > 1.0
    assert sum(bool(np.isinf(o.cap).any()) for o in orders) == 20
    assert sum(bool(o.stages.variance[-1] == 0.0) for o in orders) >= 5
    assert sum(not o.stages.open.all() for o in orders) >= 5
    assert sum(bool(((o.stages.theta == 0.0) & o.stages.open).any()) for o in orders) >= 5
    assert {0.0, 10.0} <= {float(o.urgency[0]) for o in orders}
