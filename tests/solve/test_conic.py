"""The conic solver agrees with the interior one, keeps further rows, and names those that clash."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from scheduler.errors import InfeasibleError, MisuseError, NotConvergedError
from scheduler.problem import Orders, Problem, Row, assemble
from scheduler.solve import conic, interior
from tests.builders import join, order
from tests.solve.recomputed import cost_and_risk, objective, relative_gap, size

_WITHIN = 1e-6


def drawn(seed: int, **fixed: Any) -> Orders:
    """An order of at most 26 buckets; at most 2.5 L where no cap binds, so that one minimum exists.

    Odd seeds have caps that add up to 1.02 to 3 times the order.
    """
    rng = np.random.default_rng(seed)
    count = int(rng.integers(3, 27))
    volume = rng.uniform(0.2, 1.0, count)
    volume /= volume.sum()
    quantity = 1e6 * 10.0 ** rng.uniform(-4.0, -0.9)
    room = float(rng.choice([1.02, 1.3, 3.0]))
    cap = room * quantity * volume if seed % 2 else np.full(count, np.inf)
    chosen: dict[str, Any] = {
        "quantity": quantity,
        "cap": cap,
        "share": volume * rng.uniform(0.5, 1.5, count),
        "charge": rng.choice([0.0, 0.01], count),
        "urgency": float(rng.choice([0.1, 0.3, 1.0, 3.0])),
        "relaxation": float(rng.choice([0.05, 0.3, 2.0])),
        "exponent": float(rng.choice([0.489, 0.5, 0.6, 1.0])),
    } | fixed
    return order(volume, **chosen)


def six(**fixed: Any) -> Orders:
    """Six equal buckets, 60,000 shares, at most 20,000 in each."""
    chosen: dict[str, Any] = {"quantity": 6e4, "cap": [2e4] * 6, "urgency": 0.5} | fixed
    return order([1 / 6] * 6, **chosen)


def row(name: str, buckets: list[int], lower: float, upper: float = np.inf) -> Row:
    return Row(name, np.array(buckets), np.ones(len(buckets)), lower, upper)


def agree(problem: Problem, *, feedback: bool = True) -> None:
    """Objectives within 1e-6 of impact plus lambda Var, recomputed from the formulas."""
    one = interior.solve(problem, feedback_share=float(feedback))
    other = conic.solve(problem, feedback=feedback)
    assert one.converged.all()
    assert other.converged.all()
    assert np.all(other.fractions >= 0.0)
    assert np.all(other.fractions <= problem.cap)
    assert abs(other.fractions.sum() - 1.0) < 1e-12
    if not feedback:
        problem = replace(problem, feedback_weight=np.zeros_like(problem.feedback_weight))
    difference = objective(problem, one.fractions) - objective(problem, other.fractions)
    assert abs(difference) <= _WITHIN * size(problem, one.fractions)


# the same optimum


@pytest.mark.parametrize("feedback", [True, False])
@pytest.mark.parametrize("seed", range(8))
def test_same_optimum_at_an_urgency(seed: int, feedback: bool) -> None:
    """U sqrt(R), with and without caps, own imbalance feeding the variance or not."""
    agree(assemble(drawn(seed)), feedback=feedback)


@pytest.mark.parametrize("seed", range(10, 16))
def test_same_optimum_at_a_risk_aversion(seed: int) -> None:
    """lambda R, alone and beside U sqrt(R)."""
    problem = assemble(drawn(seed, urgency=0.0 if seed < 13 else 0.3))
    count = len(problem.cap)
    cost, risk = cost_and_risk(problem, np.full(count, 1.0 / count))
    agree(replace(problem, risk_aversion=np.full(1, 0.5 * cost / risk)))


@pytest.mark.parametrize("seed", [20, 21])
def test_same_optimum_without_a_price_of_risk(seed: int) -> None:
    """U = 0: cost alone."""
    agree(assemble(drawn(seed, urgency=0.0)))


@pytest.mark.parametrize("part", [-0.01, -0.4, -1.5, 0.3])
@pytest.mark.parametrize("seed", [30, 31])
def test_same_optimum_with_an_imbalance_at_time_zero(seed: int, part: float) -> None:
    """Against the order the imbalance changes sign on the way; the cost can be negative."""
    orders = drawn(seed)
    agree(assemble(replace(orders, initial=part * orders.quantity)))


@pytest.mark.parametrize("seed", range(40, 44))
def test_same_optimum_under_ceilings(seed: int) -> None:
    """At most 25 % left in the middle and 5 % before the end, where that binds."""
    orders = drawn(seed, urgency=1e-3, quantity=1e5, charge=0.0, cap=None)
    ceiling = orders.ceiling.copy()
    ceiling[len(ceiling) // 2], ceiling[-2] = 0.25, 0.05
    problem = assemble(replace(orders, ceiling=ceiling * orders.quantity))
    agree(problem)
    # the multipliers have the right sign and unit if they, and only they, close the duality gap
    found = conic.solve(problem, feedback=False)
    linear = replace(problem, feedback_weight=np.zeros_like(problem.feedback_weight))
    assert relative_gap(linear, found.fractions, found.ceiling_price) < 1e-4
    assert relative_gap(linear, found.fractions, 0.9 * found.ceiling_price) > 1e-3


def test_same_optimum_across_a_night() -> None:
    """A closed stage holds variance and fades the imbalance; a bucket without volume is folded."""
    orders = order(
        [0.3, 0.4, 0.02, 0.0, 0.5, 0.5],
        share=[0.3, 0.3, 0.2, 0.1, 0.4, 0.5],
        is_open=[True, True, False, True, True, True],
        session=[0, 0, 1, 1, 1, 1],
        urgency=0.3,
    )
    agree(assemble(orders))


def test_orders_of_a_list_are_solved_one_by_one() -> None:
    """Three orders together give what each gives alone."""
    parts = [drawn(seed) for seed in (50, 51, 52)]
    together = conic.solve(assemble(join(parts)))
    alone = [conic.solve(assemble(part)) for part in parts]
    assert np.allclose(
        together.fractions, np.concatenate([a.fractions for a in alone]), rtol=0.0, atol=1e-6
    )
    assert together.converged.all()
    assert len(together.iterations) == 3


# rounds of majorisation


def test_each_round_lowers_the_objective() -> None:
    """Six rounds in a row, from the optimum without x^2 |z|."""
    problem = assemble(drawn(60, quantity=2e5, urgency=3.0, relaxation=0.05, exponent=0.5))
    rounds = [conic.solve(problem, most_rounds=most) for most in range(7)]
    values = [objective(problem, found.fractions) for found in rounds]
    assert np.all(np.diff(values) < 0.0)
    assert values[-1] < values[0] - 1e-6 * values[0]
    without = conic.solve(problem, feedback=False)
    assert np.allclose(rounds[0].fractions, without.fractions, rtol=0.0, atol=1e-5)


def test_too_few_rounds_are_not_called_converged() -> None:
    problem = assemble(drawn(60, quantity=2e5, urgency=3.0, relaxation=0.05, exponent=0.5))
    assert not conic.solve(problem, most_rounds=1).converged.any()


# further rows


def test_rows_are_kept() -> None:
    """A sum, a difference fixed at 0, and a weighted sum with both bounds; and they cost."""
    orders = six()
    problem = assemble(orders)
    rows = (
        row("afternoon", [3, 4, 5], 3.5e4),
        Row("level", np.array([1, 2]), np.array([1.0, -1.0]), 0.0, 0.0),
        Row("mean bucket", np.arange(6), np.arange(6.0), 0.0, 3.3 * 6e4),
    )
    found = conic.solve(replace(problem, rows=rows))
    shares = problem.shares(found.fractions, 6)
    within = 1e-6 * 6e4
    assert shares[3:].sum() >= 3.5e4 - within
    assert abs(shares[1] - shares[2]) <= within
    assert np.arange(6.0) @ shares <= 3.3 * 6e4 + within
    free = conic.solve(problem)
    assert objective(problem, found.fractions) > objective(problem, free.fractions)


def test_row_that_is_a_ceiling_gives_what_the_ceiling_gives() -> None:
    """At least 50,000 shares in the first three buckets, or at most 10,000 left after them."""
    orders = six(urgency=0.05)
    by_row = conic.solve(replace(assemble(orders), rows=(row("early", [0, 1, 2], 5e4),)))
    ceiling = np.full(6, np.inf)
    ceiling[2] = 1e4
    problem = assemble(replace(orders, ceiling=ceiling))
    by_ceiling = interior.solve(problem)
    one, other = objective(problem, by_row.fractions), objective(problem, by_ceiling.fractions)
    assert abs(one - other) <= _WITHIN * size(problem, by_ceiling.fractions)


def test_row_speaks_of_its_own_order_in_a_list() -> None:
    """Stages are counted through the list; a stage that cannot trade counts as nothing."""
    closed = six(cap=[2e4, 2e4, 0.0, 2e4, 2e4, 2e4])
    problem = assemble(join([six(), closed]))
    free = conic.solve(problem)
    found = conic.solve(replace(problem, rows=(row("late", [8, 10, 11], 3.9e4),)))
    shares = problem.shares(found.fractions, 12)
    assert np.allclose(shares[:6], problem.shares(free.fractions, 12)[:6], rtol=0.0, atol=0.1)
    assert shares[8] == 0.0
    assert abs(shares[10] + shares[11] - 3.9e4) < 0.1


# refusals


def test_clashing_rows_are_named_and_harmless_ones_are_not() -> None:
    """50,000 before and 20,000 after noon of 60,000: 10,000 too many."""
    rows = (
        row("morning", [0, 1, 2], 5e4),
        row("lunch", [2, 3], 0.0, 3.9e4),
        row("afternoon", [3, 4, 5], 2e4),
    )
    with pytest.raises(InfeasibleError, match="constraints 'morning', 'afternoon' clash") as caught:
        conic.solve(replace(assemble(six()), rows=rows))
    assert "by 10000" in str(caught.value)
    assert "lunch" not in str(caught.value)


def test_row_that_the_caps_forbid_is_named() -> None:
    """50,000 in two buckets of at most 20,000."""
    rows = (row("harmless", [3], 0.0, 1.9e4), row("rush", [0, 1], 5e4))
    with pytest.raises(InfeasibleError, match=r"constraint 'rush' clashes.*by 10000"):
        conic.solve(replace(assemble(six()), rows=rows))


def test_row_over_buckets_that_cannot_trade_is_named() -> None:
    orders = six(cap=[0.0, 2e4, 2e4, 2e4, 2e4, 2e4])
    with pytest.raises(
        InfeasibleError, match=r"constraint 'opening' asks for at least 1,.* can trade"
    ):
        conic.solve(replace(assemble(orders), rows=(row("opening", [0], 1.0),)))


def test_row_over_several_orders_is_refused() -> None:
    problem = assemble(join([six(), six()]))
    with pytest.raises(MisuseError, match="constraint 'both' covers buckets of several orders"):
        conic.solve(replace(problem, rows=(row("both", [5, 6], 1.0),)))


def test_caps_and_ceilings_that_leave_nothing_are_said_to() -> None:
    """No row is to blame where 10,000 may be left after two buckets of at most 20,000."""
    orders = six(ceiling=[np.inf, 1e4, np.inf, np.inf, np.inf, np.inf])
    with pytest.raises(InfeasibleError, match="caps and ceilings leave no schedule"):
        conic.solve(replace(assemble(orders), rows=(row("harmless", [3], 0.0, 1e4),)))


def test_other_ends_of_the_conic_solver_are_reported() -> None:
    """A tolerance out of reach: solver, status, sizes, coefficients and what to try."""
    with pytest.raises(NotConvergedError) as caught:
        conic.solve(assemble(six()), tolerance=1e-18)
    said = str(caught.value)
    for part in ("CLARABEL", "1e-18", "variables", "constraints", "coefficients", "try"):
        assert part in said
