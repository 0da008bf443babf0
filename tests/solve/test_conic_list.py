"""A list as one cone programme: the joint solver's optimum, corridors, rows across names."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pytest

from scheduler.coupling import Spans
from scheduler.errors import InfeasibleError
from scheduler.model.ragged import Array
from scheduler.problem import Row
from scheduler.solve import conic_list, joint
from scheduler.solve.joint import JointSolution
from scheduler.solve.joint_certificate import JointCertificate, certify
from scheduler.solve.linear import dynamics, exposure_map, level_map
from tests.solve.lists import (
    Linked,
    corridors_around,
    feasible_fractions,
    levels,
    objective,
    random_list,
)


def certified(listed: Linked, found: JointSolution, **aim: float) -> JointCertificate:
    return certify(
        listed.problem,
        listed.coupling,
        found.fractions,
        lower_price=found.lower_price,
        upper_price=found.upper_price,
        row_price=found.row_price,
        **aim,
    )


def tied(seed: int, corridors: int = 2, **fixed: Any) -> Linked:
    """Six names and eight buckets, begun and ended at different times."""
    listed = random_list(seed, names=6, buckets=8, factors=3, uneven=True, **fixed)
    y = feasible_fractions(listed.problem, seed)
    return corridors_around(listed, y, corridors, 0.02, seed)


# the same optimum


@pytest.mark.parametrize("exponent", [0.4, 0.5, 1.0])
@pytest.mark.parametrize("aim", [{"urgency": 1.0}, {"risk_aversion": 0.02}])
def test_same_optimum_with_own_imbalance(exponent: float, aim: dict[str, float]) -> None:
    """Objectives, by plain loops, and the corridors' multipliers; its own certificate closes."""
    listed = tied(6, exponent=exponent)
    found = conic_list.solve(listed.problem, listed.coupling, **aim)
    other = joint.solve(listed.problem, listed.coupling, **aim)
    assert found.converged
    assert other.converged
    value = objective(listed, found.fractions, **aim)
    assert value == pytest.approx(objective(listed, other.fractions, **aim), rel=1e-7)
    certificate = certified(listed, found, **aim)
    assert abs(certificate.gap) < 1e-6
    assert certificate.excess.max() <= 1e-8 * listed.gross
    most = max(other.lower_price.max(), other.upper_price.max())
    assert most > 1e-5
    assert found.lower_price == pytest.approx(other.lower_price, abs=1e-3 * most)
    assert found.upper_price == pytest.approx(other.upper_price, abs=1e-3 * most)


def test_same_optimum_with_an_imbalance_at_time_zero() -> None:
    """Against the orders: it changes sign on the way."""
    listed = tied(7, initial=-1e4)
    aim = {"urgency": 1.0}
    found = conic_list.solve(listed.problem, listed.coupling, **aim)
    other = joint.solve(listed.problem, listed.coupling, **aim)
    assert found.converged
    assert objective(listed, found.fractions, **aim) == pytest.approx(
        objective(listed, other.fractions, **aim), rel=1e-7
    )


def test_own_imbalance_left_out() -> None:
    """A schedule for another variance, of higher objective where own imbalance counts."""
    listed = tied(6, quantity=1e5, participation=1.0)
    aim = {"urgency": 3.0}
    with_it = conic_list.solve(listed.problem, listed.coupling, **aim)
    without = conic_list.solve(listed.problem, listed.coupling, feedback=False, **aim)
    assert without.iterations < with_it.iterations
    values = [objective(listed, found.fractions, **aim) for found in (with_it, without)]
    assert values[0] < values[1] * (1.0 - 1e-7)


def test_corridors_that_fix_a_level() -> None:
    """Lower and upper bound in one: an equality, kept; its multipliers close the gap."""
    listed = random_list(8, names=6, buckets=6, factors=2)
    y = feasible_fractions(listed.problem, 8)
    listed = corridors_around(listed, y, 1, 0.0, 8, every=1.0)
    found = conic_list.solve(listed.problem, listed.coupling, urgency=1.0)
    assert found.converged
    assert found.excess <= 1e-8 * listed.gross
    assert abs(certified(listed, found, urgency=1.0).gap) < 1e-6
    less = replace(found, lower_price=0.9 * found.lower_price, upper_price=0.9 * found.upper_price)
    assert certified(listed, less, urgency=1.0).gap > 1e-4


# further rows


def row_of(listed: Linked, corridor: int, interval: int) -> Row:
    """A corridor at one interval's end as a row on slices; names begin together."""
    problem, coupling = listed.problem, listed.coupling
    names = np.arange(len(problem.layout.size))
    inside = np.concatenate([problem.layout.first[names] + t for t in range(interval + 1)])
    weight = -coupling.rows[corridor] / problem.quantity
    least = coupling.rows[corridor].sum() + coupling.constant[corridor]
    return Row(
        f"corridor {corridor} at {interval}",
        problem.bucket[inside],
        np.tile(weight, interval + 1),
        float(coupling.lower[corridor, interval] - least),
        float(coupling.upper[corridor, interval] - least),
    )


@cache
def by_rows() -> tuple[Linked, Linked]:
    """A list within corridors, and the same with rows in place of the corridors."""
    listed = random_list(3, names=5, buckets=6, factors=2)
    listed = corridors_around(listed, feasible_fractions(listed.problem, 3), 2, 0.01, 3, every=1.0)
    rows = tuple(row_of(listed, which, at) for which in range(2) for at in range(5))
    free = np.full(listed.coupling.lower.shape, np.inf)
    bare = listed.within(listed.coupling.rows, -free, free)
    return listed, replace(bare, problem=replace(bare.problem, rows=rows))


def test_rows_across_names_give_what_corridors_give() -> None:
    """The same optimum and the same certificate, by the joint solver under corridors."""
    listed, rowed = by_rows()
    aim = {"urgency": 1.0}
    found = conic_list.solve(rowed.problem, rowed.coupling, **aim)
    other = joint.solve(listed.problem, listed.coupling, **aim)
    assert found.converged
    assert objective(listed, found.fractions, **aim) == pytest.approx(
        objective(listed, other.fractions, **aim), rel=1e-7
    )
    level, coupling = levels(listed, found.fractions), listed.coupling
    assert (level >= coupling.lower - 1e-7 * listed.gross).all()
    assert (level <= coupling.upper + 1e-7 * listed.gross).all()
    assert max(other.lower_price.max(), other.upper_price.max()) > 1e-3


def test_multipliers_of_rows_close_the_gap() -> None:
    """They, and only they: a tenth less leaves one."""
    _, rowed = by_rows()
    aim = {"urgency": 1.0}
    found = conic_list.solve(rowed.problem, rowed.coupling, **aim)
    assert found.row_price is not None
    assert abs(certified(rowed, found, **aim).gap) < 1e-6
    less = replace(found, row_price=0.9 * found.row_price)
    assert certified(rowed, less, **aim).gap > 1e-4


# what cannot be kept


def two_names() -> Linked:
    listed = random_list(4, names=2, buckets=4, factors=1)
    return corridors_around(listed, feasible_fractions(listed.problem, 4), 1, 0.5, 4)


def test_rows_that_clash_across_names_are_named() -> None:
    """All shares of both names in the first bucket are too many; a harmless row is not named."""
    listed = two_names()
    problem = listed.problem
    first, quantity = problem.bucket[problem.layout.first], problem.quantity
    rush = Row("rush", first, np.ones(2), 0.999 * float(quantity.sum()), np.inf)
    harmless = Row("harmless", first[:1], np.ones(1), 0.0, float(quantity[0]))
    with pytest.raises(InfeasibleError, match="constraint 'rush' clashes") as caught:
        conic_list.solve(replace(problem, rows=(harmless, rush)), listed.coupling, urgency=1.0)
    assert "harmless" not in str(caught.value)


def test_corridors_that_no_schedule_keeps_are_left_to_the_caller() -> None:
    """As by the joint solver: not converged, no matter which rows there are."""
    listed = random_list(5, names=4, buckets=5, factors=1, quantity=2e5)
    shares, bound = listed.problem.quantity, np.full((1, 5), np.inf)
    bound[0, 0] = 0.05 * shares.sum()
    listed = listed.within(shares[None], -np.full((1, 5), np.inf), bound)
    harmless = Row("harmless", listed.problem.bucket[:1], np.ones(1), 0.0, np.inf)
    for rows in ((), (harmless,)):
        found = conic_list.solve(replace(listed.problem, rows=rows), listed.coupling, urgency=1.0)
        assert not found.converged
        assert found.gap == np.inf


# what is linear, as matrices


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_matrices_are_the_maps_they_stand_for(seed: int) -> None:
    """Dynamics, corridors and exposures of random fractions."""
    listed = tied(seed)
    problem, coupling, layout = listed.problem, listed.coupling, listed.problem.layout
    y: Array = feasible_fractions(problem, seed + 1)
    x = layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size)))
    state = np.concatenate((x, y))
    matrix, right = dynamics(problem)
    assert matrix @ state == pytest.approx(right, abs=1e-12)
    matrix, constant = level_map(coupling, layout.entries)
    assert matrix @ state + constant == pytest.approx(coupling.levels(x, y), rel=1e-12)
    matrix, constant = exposure_map(coupling, layout.entries)
    exposure = coupling.exposures(x, y)
    assert np.sort(matrix @ state + constant) == pytest.approx(
        np.sort(exposure.ravel()), abs=1e-12 * np.abs(exposure).max()
    )


def test_spans_are_kept_as_by_the_joint_solver() -> None:
    """What another schedule does late, more than the optimum would: in its last three buckets."""
    listed = tied(2)
    layout = listed.problem.layout
    name = int(np.argmax(layout.size))
    last = layout.last[[name]]
    late = slice(last[0] - 2, last[0] + 1)
    least = 0.99 * feasible_fractions(listed.problem, 2)[late].sum()
    free = joint.solve(listed.problem, listed.coupling, urgency=1.0).fractions[late].sum()
    assert free < 0.9 * least
    spans = Spans(last - 2, last, np.array([least]))
    coupling = replace(listed.coupling, spans=spans)
    found, other = (
        solver.solve(listed.problem, coupling, urgency=1.0) for solver in (conic_list, joint)
    )
    assert found.converged
    assert other.converged
    assert found.fractions[late].sum() == pytest.approx(least, abs=1e-6)
    values = [objective(listed, each.fractions, urgency=1.0) for each in (found, other)]
    assert values[0] == pytest.approx(values[1], rel=1e-7)
    matrix, constant = level_map(coupling, layout.entries)
    y = found.fractions
    x = layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size)))
    level = matrix @ np.concatenate((x, y)) + constant
    assert level == pytest.approx(coupling.levels(x, y), rel=1e-9)
