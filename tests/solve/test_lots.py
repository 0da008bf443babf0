"""Rounding to whole lots: what it keeps exactly, and how little it costs."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.model.ragged import Array, Ragged
from scheduler.problem import Orders
from scheduler.solve.lots import round_to_lots
from scheduler.solve.schedule import schedule
from tests.builders import cost_of, join, order, variance_of

seeds = st.integers(0, 2**32 - 1)
many = settings(max_examples=200, deadline=None)


@dataclass(frozen=True)
class Case:
    """One order as `round_to_lots` is given it: slices within caps, above a floor."""

    shares: Array
    quantity: float
    cap: Array
    floor: Array
    lot: float

    def rounded(self) -> Array:
        return _round([self])[0]


def _round(cases: list[Case]) -> list[Array]:
    layout = Ragged(np.array([len(case.shares) for case in cases]))
    result = round_to_lots(
        layout,
        np.concatenate([case.shares for case in cases]),
        np.array([case.quantity for case in cases]),
        np.concatenate([case.cap for case in cases]),
        np.concatenate([case.floor for case in cases]),
        np.array([case.lot for case in cases]),
    )
    return np.split(result, layout.last[:-1] + 1)


def _case(seed: int) -> Case:
    """Caps from none to just enough, some buckets closed; floors that the slices keep."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 25))
    lot = float(rng.choice([1.0, 10.0, 100.0, 0.25]))
    quantity = lot * float(rng.integers(1, 300)) + float(rng.choice([0.0, 0.0, 0.37])) * lot
    weight = rng.gamma(0.7, size=count) + 1e-3
    weight[rng.random(count) < 0.2] = 0.0
    weight[rng.integers(count)] += 1.0
    cap = np.where(weight > 0.0, np.inf, 0.0)
    if rng.random() < 0.7:
        cap = weight / weight.sum() * quantity * rng.choice([1.0, 1.05, 2.0])
    part = np.minimum(weight * quantity / weight.sum(), cap)
    shares = part * quantity / part.sum()
    floor = np.zeros(count)
    if rng.random() < 0.5:
        at = int(rng.integers(count))
        floor[at] = np.cumsum(shares)[at] * rng.choice([0.7, 1.0])
    return Case(shares, quantity, cap, floor, lot)


def _without_remainder(case: Case, slices: Array) -> Array:
    """The slices in lots, freed of what the quantity has beyond whole lots."""
    lot = min(case.lot, case.quantity)
    whole = slices / lot
    whole[np.flatnonzero(whole)[-1]] -= _odd(case)
    return whole


def _odd(case: Case) -> float:
    """What the quantity has beyond whole lots, in lots."""
    lots = case.quantity / min(case.lot, case.quantity)
    return float(lots - np.floor(lots + 1e-9))


@given(seeds)
@many
def test_whole_lots_add_up_to_the_quantity(seed: int) -> None:
    """Exactly; only the last slice carries what the quantity has beyond whole lots."""
    case = _case(seed)
    slices = case.rounded()
    assert slices.sum() == pytest.approx(case.quantity, rel=1e-14)
    assert (slices >= 0.0).all()
    lots = _without_remainder(case, slices)
    assert lots == pytest.approx(np.round(lots), abs=1e-9)


@given(seeds)
@many
def test_each_cumulative_slice_is_within_a_lot_of_its_plan(seed: int) -> None:
    """So no rounding error can pile up; at the end it lacks what the last slice will carry."""
    case = _case(seed)
    lots = _without_remainder(case, case.rounded())
    planned = np.cumsum(case.shares) / min(case.lot, case.quantity)
    assert np.abs(np.cumsum(lots) - planned).max() < 1.0


@given(seeds)
@many
def test_a_cap_is_exceeded_by_less_than_a_lot_that_was_unused_before(seed: int) -> None:
    """Walked slice by slice: never a lot above a cap, never ahead of all caps so far."""
    case = _case(seed)
    lots = _without_remainder(case, case.rounded())
    unused = 0.0
    for count, cap in zip(lots, case.cap / min(case.lot, case.quantity), strict=True):
        over = count - cap
        assert over < 1.0
        assert over <= unused + 1e-6
        assert count == 0.0 or cap > 0.0
        unused += cap - count


@given(seeds)
@many
def test_what_has_to_be_done_by_a_time_is_done_to_a_lot(seed: int) -> None:
    """And entirely where nothing is capped."""
    case = _case(seed)
    lots = _without_remainder(case, case.rounded())
    lot = min(case.lot, case.quantity)
    done, asked = np.cumsum(lots), case.floor / lot
    assert (done > asked - 1.0).all()
    if np.isinf(case.cap.max()) and not _odd(case) > 1e-6:
        at = (asked > 0.0) & (case.cap > 0.0)
        whole = np.floor(case.quantity / lot + 1e-9)
        assert (done[at] >= np.minimum(asked[at], whole) - 1e-6).all()


@given(st.lists(seeds, min_size=2, max_size=6))
@settings(max_examples=50, deadline=None)
def test_company_changes_nothing(chosen: list[int]) -> None:
    """Orders of any lengths rounded together are rounded as alone."""
    cases = [_case(seed) for seed in chosen]
    for case, slices in zip(cases, _round(cases), strict=True):
        assert (slices == case.rounded()).all()


def test_slices_that_are_whole_lots_stay() -> None:
    """Within caps or at them."""
    shares = np.array([300.0, 0.0, 200.0, 500.0])
    for cap in (shares, np.full(4, np.inf), shares + 50.0):
        case = Case(shares, 1_000.0, cap, np.zeros(4), 100.0)
        assert (case.rounded() == shares).all()


def test_what_cannot_complete_is_rounded_down() -> None:
    """Slices that fall short of the quantity never add up to more than they did."""
    cap = np.array([170.0, 160.0, 155.0])
    slices = Case(cap, 10_000.0, cap, np.zeros(3), 100.0).rounded()
    assert slices.sum() == 400.0
    assert set(slices % 100.0) == {0.0}


def test_half_a_lot_each_alternates() -> None:
    """Nearest would be a lot or nothing each time; the cumulative schedule takes turns."""
    slices = Case(np.full(8, 50.0), 400.0, np.full(8, np.inf), np.zeros(8), 100.0).rounded()
    assert slices.tolist() == [100.0, 0.0] * 4


# what it costs


def _objectives(orders: Orders, rows: list[Array]) -> Array:
    """C + U std of several schedules of one order."""
    copies = join([orders] * len(rows))
    shares = np.concatenate(rows)
    result: Array = cost_of(copies, shares) + copies.urgency * np.sqrt(variance_of(copies, shares))
    return result


def _solved(seed: int, most: int, lots: int, room: float) -> tuple[Orders, Array, Array]:
    """An order of so many lots of 100, its schedule, and that in whole lots."""
    rng = np.random.default_rng(seed)
    volume = rng.uniform(0.2, 1.0, int(rng.integers(3, most)))
    volume /= volume.sum()
    quantity = 100.0 * lots
    orders = order(
        volume,
        quantity=quantity,
        cap=volume * quantity * room,
        adv=quantity * 10.0 ** rng.uniform(0.5, 3.0),
        urgency=float(rng.choice([0.0, 0.1, 0.5, 2.0])),
        relaxation=float(rng.choice([0.02, 0.05, 0.3])),
    )
    ideal = schedule(orders).shares
    slices = round_to_lots(
        orders.stages.layout,
        ideal,
        orders.quantity,
        orders.cap,
        np.zeros(len(volume)),
        np.array([100.0]),
    )
    return orders, ideal, slices


@pytest.mark.parametrize("seed", range(60))
def test_rounding_costs_less_than_a_thousandth(seed: int) -> None:
    """Of the objective of an uncapped order of a hundred lots or more."""
    lots = int(np.random.default_rng(seed).choice([100, 150, 400, 3_000]))
    orders, ideal, slices = _solved(seed, most=40, lots=lots, room=np.inf)
    exact, whole = _objectives(orders, [ideal, slices])
    assert whole <= exact * 1.001


def _lawful(counts: Array, cap: Array, given_counts: Array) -> bool:
    """Nothing above a cap but what is unused since the slice before covers, or was there."""
    unused = 0.0
    for count, most, before in zip(counts, cap, given_counts, strict=True):
        if count < 0.0 or (count > most + min(unused, 1.0 - 1e-9) + 1e-9 and count > before):
            return False
        unused = 0.0 if count > 0.0 else unused + most
    return True


@pytest.mark.parametrize("seed", range(30))
def test_no_lot_moved_to_another_bucket_gains_a_thousandth(seed: int) -> None:
    """Capped orders of a hundred lots or more, moved lot by lot as long as it helps."""
    rng = np.random.default_rng(1_000 + seed)
    room = float(rng.choice([1.05, 1.3, 2.0]))
    orders, _, slices = _solved(seed, most=8, lots=int(rng.choice([100, 300])), room=room)
    cap = orders.cap / 100.0
    first = counts = slices / 100.0
    start = best = float(_objectives(orders, [slices])[0])
    while True:
        moves = []
        for source, target in permutations(range(len(counts)), 2):
            moved = counts.copy()
            moved[source] -= 1.0
            moved[target] += 1.0
            if _lawful(moved, cap, first):
                moves.append(moved)
        if not moves:
            break
        values = _objectives(orders, [100.0 * moved for moved in moves])
        if values.min() >= best * (1.0 - 1e-12):
            break
        best, counts = float(values.min()), moves[int(values.argmin())]
    assert start <= best * 1.001
