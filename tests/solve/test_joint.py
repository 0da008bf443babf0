"""Lists solved as one: against a cone programme, recomputed certificates, refusals, properties.

Corridors are drawn about a schedule that is within the caps, so that they can be kept; or moved
away from it, and then a linear programme of its own says whether they can.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.problem import assemble
from scheduler.solve import conic_list, interior, joint
from scheduler.solve.joint_certificate import JointCertificate, certify
from scheduler.solve.joint_feasible import smallest_violation
from tests.builders import join, order
from tests.solve.lists import (
    Linked,
    corridors_around,
    feasible_fractions,
    level_matrix,
    levels,
    linked,
    objective,
    random_list,
    relative_gap,
)


def solved(
    listed: Linked, *, urgency: float = 0.0, risk_aversion: float = 0.0, tolerance: float = 1e-8
) -> tuple[Array, joint.JointSolution, JointCertificate]:
    """Fractions within the caps, the solution and its certificate; asserts that it converged."""
    problem, coupling = listed.problem, listed.coupling
    aim = {"urgency": urgency, "risk_aversion": risk_aversion}
    solution = joint.solve(problem, coupling, tolerance=tolerance, **aim)
    assert solution.converged
    fractions = np.clip(solution.fractions, 0.0, problem.cap)
    prices = {"lower_price": solution.lower_price, "upper_price": solution.upper_price}
    return fractions, solution, certify(problem, coupling, fractions, **aim, **prices)


def fractions_of(listed: Linked, **aim: float) -> Array:
    """The optimum to a gap of 1e-12."""
    return solved(listed, tolerance=1e-12, **aim)[0]


def check(listed: Linked, urgency: float, *, by_loops: bool = False) -> None:
    """Gap and complementarity below 1e-7, caps, totals and corridors kept."""
    fractions, solution, certificate = solved(listed, urgency=urgency)
    problem = listed.problem
    assert abs(certificate.gap) < 1e-7
    assert certificate.kkt_residual < 1e-7
    assert certificate.excess.max(initial=0.0) <= 2e-9 * listed.gross
    assert solution.fractions.min() >= 0.0
    assert (solution.fractions <= problem.cap).all()
    assert problem.layout.sum(fractions) == pytest.approx(1.0, abs=1e-12)
    lower, upper = listed.coupling.bounds
    level = levels(listed, fractions)[listed.coupling.limited]
    assert (level >= lower - 1e-8 * listed.gross).all()
    assert (level <= upper + 1e-8 * listed.gross).all()
    if by_loops:
        prices = (solution.lower_price, solution.upper_price)
        gap = relative_gap(listed, fractions, *prices, urgency=urgency)
        assert gap == pytest.approx(certificate.gap, abs=1e-9)
        value = objective(listed, fractions, urgency)
        assert value == pytest.approx(certificate.objective, rel=1e-12)


# against a general solver


def conic_fractions(listed: Linked, **aim: float) -> Array:
    found = conic_list.solve(listed.problem, listed.coupling, **aim)
    assert found.converged
    return found.fractions


@pytest.mark.parametrize(
    ("names", "buckets", "factors", "corridors", "urgency"),
    [
        (1, 8, 1, 1, 3.0),
        (3, 6, 2, 0, 1.0),
        (6, 8, 2, 3, 0.1),
        (10, 8, 0, 3, 2.0),
        (15, 6, 3, 2, 10.0),
        (30, 10, 4, 1, 1.0),
        (30, 6, 4, 3, 0.3),
        pytest.param(100, 13, 10, 1, 1.0, marks=pytest.mark.slow),
        pytest.param(100, 13, 10, 3, 0.3, marks=pytest.mark.slow),
    ],
)
def test_objective_is_that_of_a_cone_programme(
    names: int, buckets: int, factors: int, corridors: int, urgency: float
) -> None:
    """Without feedback; cvxpy and Clarabel, to 1e-6 of the objective, at its own certified gap."""
    shape = {"names": names, "buckets": buckets, "factors": factors}
    listed = random_list(names, **shape, uneven=names < 30, feedback=0.0)
    if corridors:
        y = feasible_fractions(listed.problem, names)
        listed = corridors_around(listed, y, corridors, 0.02, names)
    aim = {"urgency": urgency}
    found = objective(listed, solved(listed, **aim)[0], **aim)
    assert found == pytest.approx(
        objective(listed, conic_fractions(listed, **aim), **aim), rel=1e-6
    )


def test_mean_variance_objective_is_that_of_a_cone_programme() -> None:
    """C + lambda R in place of C + U sqrt R; the corridors bind."""
    listed = random_list(4, names=8, buckets=6, factors=2, uneven=True, feedback=0.0)
    listed = corridors_around(listed, feasible_fractions(listed.problem, 4), 2, 0.02, 4)
    aim = {"risk_aversion": 0.02}
    fractions, solution, _ = solved(listed, **aim)
    found = objective(listed, fractions, **aim)
    assert found == pytest.approx(
        objective(listed, conic_fractions(listed, **aim), **aim), rel=1e-6
    )
    assert max(solution.lower_price.max(), solution.upper_price.max()) > 0.01


# random lists


def _drawn(seed: int) -> tuple[Linked, float]:
    """Up to 12 names and 20 corridors that can be kept, 1e-5 to 1 of the gross wide.

    Urgency runs over eight decades; every fifth list must do 30 % in its first buckets; some are
    uncapped, some have a reading, half have names that begin and end at different times.
    """
    rng = np.random.default_rng([seed, 7])
    count = int(rng.choice([0, 1, 1, 2, 3, 5, 20]))
    first = 0.3 if seed % 5 == 0 else 0.0
    fixed: dict[str, Any] = {}
    if first or rng.random() < 0.4:
        fixed["participation"] = 1.0
    if rng.random() < 0.1:
        fixed["initial"] = 10.0 ** rng.uniform(2.0, 4.0)
    listed = random_list(
        seed,
        names=int(rng.integers(4 if count == 20 else 1, 13)),
        buckets=int(rng.integers(2, 14)),
        factors=int(rng.integers(0, 5)),
        uneven=bool(rng.random() < 0.5),
        **fixed,
    )
    y = feasible_fractions(listed.problem, seed, first)
    if count:
        width, every = 10.0 ** rng.uniform(-5.0, 0.0), 0.7 if count < 20 else 0.15
        listed = corridors_around(listed, y, count, width, seed, every)
    return listed, 10.0 ** rng.uniform(-4.0, 4.0)


@pytest.mark.parametrize("seed", range(60))
def test_random_lists(seed: int) -> None:
    """Optimal by a certificate recomputed from the schedule; every tenth by plain loops, too."""
    listed, urgency = _drawn(seed)
    check(listed, urgency, by_loops=seed % 10 == 0)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(60, 560))
def test_more_random_lists(seed: int) -> None:
    """As above."""
    check(*_drawn(seed))


@pytest.mark.parametrize("width", [1e-1, 1e-2, 1e-4, 1e-6, 1e-8, 0.0])
@pytest.mark.parametrize("urgency", [1e-4, 1.0, 1e4])
def test_corridors_of_any_width(width: float, urgency: float) -> None:
    """Two-sided at every bucket end, on the net and the gross, down to none at all."""
    listed = random_list(3, names=12, buckets=8)
    y = feasible_fractions(listed.problem, 3)
    check(corridors_around(listed, y, 2, width, 3, every=1.0), urgency)


@pytest.mark.parametrize("width", [1e-2, 1e-6, 0.0])
@pytest.mark.parametrize("urgency", [1e-2, 10.0])
def test_corridors_that_say_the_same(width: float, urgency: float) -> None:
    """Three times over, as cash, net and gross do of a list on one side."""
    listed = random_list(2, names=6, buckets=6)
    once = corridors_around(listed, feasible_fractions(listed.problem, 2), 1, width, 2, every=1.0)
    c = once.coupling
    thrice = listed.within(*(np.concatenate([part] * 3) for part in (c.rows, c.lower, c.upper)))
    check(thrice, urgency)


def test_twenty_corridors() -> None:
    """On random weights of 40 names, 1 % of the gross wide."""
    listed = random_list(5, names=40, buckets=13, factors=5)
    y = feasible_fractions(listed.problem, 5)
    check(corridors_around(listed, y, 20, 0.01, 5, every=1.0), 1.0)


@pytest.mark.parametrize("urgency", [1e-3, 0.05])
def test_thirty_percent_in_the_first_bucket(urgency: float) -> None:
    """A corridor on the gross alone forces it, and binds: exactly 30 % is done."""
    listed = random_list(6, names=10, buckets=8, participation=1.0)
    fractions, _, _ = solved(_gross_after_first(listed, 0.7), urgency=urgency)
    unforced, _, _ = solved(listed, urgency=urgency)
    kept = _gross_left(listed, fractions)[0]
    assert _gross_left(listed, unforced)[0] > 0.75
    assert kept == pytest.approx(0.7, abs=1e-6)
    check(_gross_after_first(listed, 0.7), urgency)


def _gross_left(listed: Linked, fractions: Array) -> Array:
    """(T,) part of the gross left at the end of every interval."""
    notional = listed.orders.market.price * listed.orders.quantity / listed.unit
    nowhere = np.full((1, listed.coupling.bucket.shape[1]), np.inf)
    result: Array = levels(listed.within(notional[None], -nowhere, nowhere), fractions)[0]
    return result / listed.gross


def _gross_after_first(listed: Linked, most: float) -> Linked:
    notional = listed.orders.market.price * listed.orders.quantity / listed.unit
    upper = np.full((1, listed.coupling.bucket.shape[1]), np.inf)
    upper[0, 0] = most * listed.gross
    return listed.within(notional[None], -np.full_like(upper, np.inf), upper)


@pytest.mark.parametrize("side", ["lower", "upper"])
def test_corridors_with_one_side(side: str) -> None:
    """Solved in no more iterations than those with two."""
    listed = random_list(7, names=10, buckets=8)
    both = corridors_around(listed, feasible_fractions(listed.problem, 7), 2, 0.01, 7, every=1.0)
    missing = {"lower": "upper", "upper": "lower"}[side]
    open_ended = np.full_like(both.coupling.lower, np.inf if side == "lower" else -np.inf)
    one = replace(both, coupling=replace(both.coupling, **{missing: open_ended}))
    check(one, 1.0)
    assert solved(one, urgency=1.0)[1].iterations <= solved(both, urgency=1.0)[1].iterations + 3


def test_names_with_a_single_bucket() -> None:
    """They have no choice, and hold up nobody else."""
    free = random_list(8, names=3, buckets=6)
    orders = join([order([1.0], quantity=1e4, participation=1.0), free.orders])
    exposures = np.full((4, 1), 0.005)
    check(linked(orders, exposures), 1.0)


def test_caps_that_are_just_enough() -> None:
    """Room of 1e-9 of the order and more."""
    for room in (1e-2, 1e-5, 1e-9):
        listed = random_list(9, names=5, buckets=6)
        orders, layout = listed.orders, listed.orders.stages.layout
        curve = orders.stages.theta / layout.sum(orders.stages.theta)[layout.owner]
        tight = curve * orders.quantity[layout.owner] * (1.0 + room)
        cap = np.where(layout.owner < 2, tight, orders.cap)
        check(linked(replace(orders, cap=cap), np.full((5, 1), 0.005)), 1.0)


# corridors that no schedule keeps


def _least_violation(listed: Linked) -> float:
    """Least sum of violations over all schedules within the caps, by a dense linear programme."""
    import cvxpy as cp

    problem, layout = listed.problem, listed.problem.layout
    matrix, constant = level_matrix(listed)
    lower, upper = listed.coupling.bounds
    y = cp.Variable(layout.entries, nonneg=True)
    below, above = (cp.Variable(len(lower), nonneg=True) for _ in range(2))
    level = (matrix @ y + constant) / listed.gross
    owner = np.equal.outer(np.arange(len(layout.size)), layout.owner).astype(float)
    rules = [owner @ y == 1.0, y <= np.minimum(problem.cap, 1.0)]
    for finite, rule in (
        (np.isfinite(lower), level + below - lower / listed.gross >= 0.0),
        (np.isfinite(upper), upper / listed.gross + above - level >= 0.0),
    ):
        assert finite.all()
        rules.append(rule)
    programme = cp.Problem(cp.Minimize(cp.sum(below) + cp.sum(above)), rules)
    programme.solve(solver="CLARABEL")
    assert programme.status == "optimal"
    return float(programme.value)


def _margin(listed: Linked) -> float:
    """Most distance to all corridors at once, in parts of the gross; negative: none keeps them."""
    from scipy.optimize import linprog

    layout = listed.problem.layout
    matrix, constant = level_matrix(listed)
    lower, upper = listed.coupling.bounds
    count, gross = layout.entries, listed.gross
    has_low, has_high = np.isfinite(lower), np.isfinite(upper)
    above = np.vstack((matrix[has_high], -matrix[has_low])) / gross
    limit = np.concatenate(((upper - constant)[has_high], (constant - lower)[has_low])) / gross
    owner = np.equal.outer(np.arange(len(layout.size)), layout.owner).astype(float)
    found = linprog(
        np.append(np.zeros(count), -1.0),
        np.column_stack((above, np.ones(len(above)))),
        limit,
        np.column_stack((owner, np.zeros(len(owner)))),
        np.ones(len(owner)),
        bounds=[*((0.0, min(cap, 1.0)) for cap in listed.problem.cap), (None, None)],
    )
    assert found.status == 0
    return float(-found.fun)


def _moved(seed: int) -> tuple[Linked, float]:
    """Corridors moved up by as much as decides whether they can be kept."""
    rng = np.random.default_rng([seed, 11])
    listed = random_list(
        seed, names=int(rng.integers(1, 8)), buckets=int(rng.integers(3, 9)), uneven=seed % 2 == 0
    )
    width = 10.0 ** rng.uniform(-4.0, -1.0)
    y = feasible_fractions(listed.problem, seed)
    listed = corridors_around(listed, y, int(rng.integers(1, 3)), width, seed)
    coupling, by = listed.coupling, listed.gross * 10.0 ** rng.uniform(-2.0, 0.0)
    moved = replace(coupling, lower=coupling.lower + by, upper=coupling.upper + by)
    return replace(listed, coupling=moved), 10.0 ** rng.uniform(-2.0, 2.0)


@pytest.mark.parametrize("seed", range(40))
def test_corridors_are_kept_or_refused(seed: int) -> None:
    """As a linear programme of its own says; none of the lists is a close call."""
    listed, urgency = _moved(seed)
    margin = _margin(listed)
    assert abs(margin) > 1e-6
    below, above = smallest_violation(listed.problem, listed.coupling)
    short = float(below.sum() + above.sum()) / listed.gross
    if margin > 0.0:
        check(listed, urgency)
        assert short < 1e-9
    else:
        solution = joint.solve(listed.problem, listed.coupling, urgency=urgency)
        assert not solution.converged
        assert solution.excess > 0.0
        assert short > 1e-6


def test_both_kinds_of_corridors_were_among_them() -> None:
    """At least ten that can be kept and ten that cannot."""
    kept = sum(_margin(_moved(seed)[0]) > 0.0 for seed in range(40))
    assert 10 <= kept <= 30


@pytest.mark.parametrize("seed", range(8))
def test_least_violation_is_that_of_a_dense_programme(seed: int) -> None:
    """The sum over all bounds, through cvxpy; and it is 0 where all can be kept."""
    listed = random_list(seed, names=5, buckets=6, uneven=seed % 2 == 0)
    y = feasible_fractions(listed.problem, seed)
    listed = corridors_around(listed, y, 2, 0.01, seed, every=1.0)
    coupling, rng = listed.coupling, np.random.default_rng(seed)
    ends = np.flatnonzero(np.isfinite(coupling.lower).all(axis=0))
    shift = np.zeros_like(coupling.lower)
    shift[:, rng.choice(ends, 2, replace=False)] = listed.gross * rng.choice([0.0, 0.5, -1.5])
    moved = replace(coupling, lower=coupling.lower + shift, upper=coupling.upper + shift)
    # bounds on both sides everywhere but where nobody can move the level
    listed = replace(listed, coupling=moved)
    below, above = smallest_violation(listed.problem, listed.coupling)
    found = float(below.sum() + above.sum()) / listed.gross
    assert found == pytest.approx(_least_violation(listed), abs=1e-6)


@pytest.mark.parametrize("seed", range(8))
def test_softened_corridors_are_broken_by_what_they_gave(seed: int) -> None:
    """Bounds moved by the least amounts, and 1e-7 of the gross, can be kept; originals cannot."""
    listed = random_list(seed, names=6, buckets=6)
    y = feasible_fractions(listed.problem, seed)
    listed = corridors_around(listed, y, 2, 0.01, seed, every=1.0)
    coupling = listed.coupling
    shift = np.zeros_like(coupling.lower)
    shift[0, 2] = 1.5 * listed.gross
    coupling = replace(coupling, lower=coupling.lower + shift, upper=coupling.upper + shift)
    assert not joint.solve(listed.problem, coupling, urgency=1.0).converged
    below, above = smallest_violation(listed.problem, coupling)
    room = 1e-7 * listed.gross
    lower, upper = coupling.lower.copy(), coupling.upper.copy()
    lower[coupling.limited] -= below + room
    upper[coupling.limited] += above + room
    soft = replace(listed, coupling=replace(coupling, lower=lower, upper=upper))
    check(soft, 1.0)
    fractions, _, _ = solved(soft, urgency=1.0)
    broken = certify(listed.problem, coupling, fractions, urgency=1.0).excess
    assert (broken <= below + above + 1.01 * room).all()
    assert broken.sum() >= (below.sum() + above.sum()) * (1.0 - 1e-9)


# the certificate


@pytest.mark.parametrize("seed", range(6))
def test_gap_bounds_the_distance_to_the_optimum(seed: int) -> None:
    """Of any schedule that keeps the corridors, with whatever multipliers."""
    listed = random_list(seed, names=5, buckets=6)
    other = feasible_fractions(listed.problem, seed)
    listed = corridors_around(listed, other, 2, 0.1, seed)
    fractions, solution, best = solved(listed, risk_aversion=0.01)
    assert best.convex.all()
    prices = {"lower_price": solution.lower_price, "upper_price": solution.upper_price}
    for witnesses in (prices, {}):
        poor = certify(listed.problem, listed.coupling, other, risk_aversion=0.01, **witnesses)
        gap = objective(listed, other, 0.0, 0.01) - objective(listed, fractions, 0.0, 0.01)
        impact = poor.cost - listed.problem.charge @ other - listed.problem.constant_cost.sum()
        assert poor.gap * (impact + 0.01 * poor.risk) >= gap > 0.0


def test_a_broken_corridor_shows_as_excess() -> None:
    """By the money by which it is broken, bound by bound."""
    listed = random_list(1, names=5, buckets=6)
    y = feasible_fractions(listed.problem, 1)
    listed = corridors_around(listed, feasible_fractions(listed.problem, 2), 2, 0.01, 1)
    found = certify(listed.problem, listed.coupling, y, urgency=1.0).excess
    lower, upper = listed.coupling.bounds
    level = levels(listed, y)[listed.coupling.limited]
    assert found == pytest.approx(np.maximum(np.maximum(lower - level, level - upper), 0.0))
    assert found.max() > 0.0


def test_factor_risk_adds_up() -> None:
    """Orthonormal factors' parts, and the names' own, make the variance of the list."""
    listed = random_list(2, names=5, buckets=6, uneven=True)
    fractions, _, found = solved(listed, urgency=1.0)
    alone = certify(
        listed.problem, replace(listed.coupling, loadings=np.zeros((5, 0))), fractions, urgency=1.0
    )
    assert found.factor_risk.shape == (2,)
    assert found.risk == pytest.approx(alone.risk + found.factor_risk.sum(), rel=1e-12)


def test_a_large_uncapped_name_is_not_called_convex() -> None:
    """1 ADV without a cap at a high price of risk; small capped ones beside it are."""
    large = order(np.full(6, 1 / 6), quantity=1e6)
    small = order(np.full(6, 1 / 6), quantity=1e3, participation=0.2)
    listed = linked([large, small, small], np.full((3, 1), 0.01))
    assert solved(listed, urgency=1.0)[2].convex.tolist() == [False, True, True]


# what must be so


@pytest.mark.parametrize("explained", [0.0, 0.5, 0.99])
def test_a_list_of_one_is_the_order_alone(explained: float) -> None:
    """Whatever part of its variance comes by a factor: the diagonal is the same."""
    alone = random_list(11, names=1, buckets=9, factors=0).orders
    single = replace(alone, urgency=np.array([1.5]))
    expected = interior.solve(assemble(single), tolerance=1e-12).fractions
    listed = linked(alone, np.sqrt(explained) * alone.market.vol[:, None])
    assert fractions_of(listed, urgency=1.5) == pytest.approx(expected, abs=1e-6)


def test_without_factors_a_list_is_its_orders_at_one_risk_aversion() -> None:
    """The implied lambda of the list, the same for all."""
    listed = random_list(12, names=6, buckets=7, factors=0, uneven=True)
    fractions, _, found = solved(listed, urgency=1.0, tolerance=1e-12)
    each = replace(
        listed.orders, risk_aversion=np.full(6, found.risk_aversion / listed.unit), specific=1.0
    )
    alone = interior.solve(assemble(each), tolerance=1e-12).fractions
    assert fractions == pytest.approx(alone, abs=1e-6)
    by_lambda = fractions_of(listed, risk_aversion=found.risk_aversion)
    assert fractions == pytest.approx(by_lambda, abs=1e-6)


@pytest.mark.parametrize("seed", range(5))
def test_the_order_of_the_names_does_not_matter(seed: int) -> None:
    """A list told in another order has each name's schedule unchanged."""
    listed = random_list(seed, names=6, buckets=7, uneven=True)
    listed = corridors_around(listed, feasible_fractions(listed.problem, seed), 2, 0.05, seed)
    turned = np.random.default_rng(seed).permutation(6).tolist()
    _, at = listed.problem.layout.take(np.array(turned))
    expected = fractions_of(listed, urgency=1.0)[at]
    assert fractions_of(listed.take(turned), urgency=1.0) == pytest.approx(expected, abs=1e-5)


@pytest.mark.parametrize("urgency", [0.1, 1.0, 10.0])
def test_two_names_that_move_as_one_are_one_of_double_size(urgency: float) -> None:
    """Without feedback, and with the factor carrying all variance (psi = 0)."""
    volume = np.array([0.3, 0.1, 0.2, 0.4])
    chosen = {"quantity": 4e4, "participation": 0.3, "feedback": 0.0}
    half = order(volume, **chosen)
    whole = order(volume, **(chosen | {"quantity": 8e4}), adv=2e6)
    exposure = half.market.vol[0]
    pair = fractions_of(linked([half, half], np.full((2, 1), exposure)), urgency=urgency)
    one = fractions_of(linked(whole, np.full((1, 1), exposure)), urgency=urgency)
    assert pair[:4] == pytest.approx(pair[4:], abs=1e-6)
    assert pair[:4] == pytest.approx(one, abs=1e-6)


@pytest.mark.parametrize("explained", [0.1, 0.5, 0.9])
@pytest.mark.parametrize("ratio", [1.0, 2.5])
def test_a_hedged_pair_takes_its_time(explained: float, ratio: float) -> None:
    """More in all is left at every bucket end of a long-short pair than of the same on one side."""
    volume = np.full(8, 0.125)
    orders = join([order(volume, quantity=quantity) for quantity in (3e4, 3e4 * ratio)])
    exposures = np.full((2, 1), np.sqrt(explained) * 0.02)
    left = []
    for side in ([1, 1], [1, -1]):
        listed = linked(orders, exposures, side=side)
        left.append(_gross_left(listed, fractions_of(listed, urgency=0.5))[:-1])
    assert (left[1] > left[0] + 1e-4).all()


def test_the_side_of_a_name_without_others_does_not_matter() -> None:
    """All signs turned: the same schedule."""
    listed = random_list(13, names=5, buckets=6)
    turned = replace(listed, coupling=replace(listed.coupling, loadings=-listed.coupling.loadings))
    expected = fractions_of(listed, urgency=1.0)
    assert fractions_of(turned, urgency=1.0) == pytest.approx(expected, abs=1e-7)


@pytest.mark.parametrize("unit", [1.0, 1e3, 1e9])
def test_the_unit_of_money_does_not_matter(unit: float) -> None:
    """Prices in another currency, and the solver's own unit; U has none."""
    listed = random_list(14, names=5, buckets=6)
    listed = corridors_around(listed, feasible_fractions(listed.problem, 14), 2, 0.05, 14)
    market = listed.orders.market
    orders = replace(
        listed.orders,
        market=replace(market, price=market.price * unit),
        charge=listed.orders.charge * unit,
    )
    dearer = replace(listed, problem=assemble(orders).in_unit(listed.unit * unit))
    expected = fractions_of(listed, urgency=1.0)
    assert fractions_of(dearer, urgency=1.0) == pytest.approx(expected, abs=1e-6)
    other = replace(
        listed,
        problem=listed.problem.in_unit(listed.unit * 7.0),
        coupling=listed.coupling.scaled(7.0),
        unit=listed.unit * 7.0,
    )
    assert fractions_of(other, urgency=1.0) == pytest.approx(expected, abs=1e-6)


def test_a_corridor_that_does_not_bind_changes_nothing() -> None:
    """And costs nothing; one that binds does."""
    listed = random_list(15, names=5, buckets=6)
    free, _, best = solved(listed, urgency=1.0, tolerance=1e-12)
    loose = corridors_around(listed, free, 2, 2.0, 15, every=1.0)
    assert fractions_of(loose, urgency=1.0) == pytest.approx(free, abs=1e-5)
    other = feasible_fractions(listed.problem, 15)
    tight = solved(corridors_around(listed, other, 2, 0.01, 15, every=1.0), urgency=1.0)[2]
    assert tight.objective > best.objective * (1.0 + 1e-4)


@pytest.mark.parametrize("seed", range(4))
def test_an_earlier_schedule_is_a_start(seed: int) -> None:
    """The same optimum, from one of another urgency."""
    listed = random_list(seed, names=6, buckets=8)
    listed = corridors_around(listed, feasible_fractions(listed.problem, seed), 2, 0.05, seed)
    cold = joint.solve(listed.problem, listed.coupling, urgency=1.2)
    earlier = joint.solve(listed.problem, listed.coupling, urgency=1.0).fractions
    warm = joint.solve(listed.problem, listed.coupling, urgency=1.2, start=earlier)
    assert warm.converged
    found, expected = (objective(listed, s.fractions, 1.2) for s in (warm, cold))
    assert found == pytest.approx(expected, rel=1e-7)
