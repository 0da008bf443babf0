"""One clock for names on different exchanges: edges, what is left, and whose variance is when.

27 November 2026 is a half day in New York alone, 31 December 2026 one in London alone; Tokyo and
Hong Kong break for lunch.
"""

from __future__ import annotations

from dataclasses import replace
from datetime import date
from typing import Any

import numpy as np
import pandas as pd
import pytest

from scheduler.clock import Clock, common_clock
from scheduler.coupling import AFTER, BEFORE, Coupling
from scheduler.intake import Book, take_in
from scheduler.model.ragged import Array
from scheduler.model.risk import variance
from scheduler.problem import Problem, assemble
from scheduler.sessions import Grid, Kind
from scheduler.tables.inputs import read_inputs
from tests.desk import DAY, name, settings_of, task
from tests.solve.lists import feasible_fractions

NEW_YORK_HALF, LONDON_HALF = date(2026, 11, 27), date(2026, 12, 31)


class Linked:
    """A book of one order a symbol, each (calendar, columns of the orders table), on one clock."""

    def __init__(
        self,
        *names: tuple[str, dict[str, Any]],
        day: date = DAY,
        profile: str = "u-shape",
        at: str | None = None,
        bucket: float = 60.0,
    ) -> None:
        symbols = [f"S{number}" for number in range(len(names))]
        orders = [
            task(1e4, symbol=s, **cells) for s, (_, cells) in zip(symbols, names, strict=True)
        ]
        market = [
            name(s, calendar=calendar, price=10.0 + 7.0 * number, profile=profile)
            for number, (s, (calendar, _)) in enumerate(zip(symbols, names, strict=True))
        ]
        settings = settings_of(bucket=bucket)
        inputs = read_inputs(pd.DataFrame(orders), pd.DataFrame(market), settings=settings)
        book = take_in(inputs, settings, day=day, at=at or f"{day}T00:00Z", together=True)
        self.book: Book = book
        self.problem: Problem = assemble(book.arrays)
        self.clock: Clock = common_clock(book.grids, self.problem)

    @property
    def coupling(self) -> Coupling:
        """A factor for every name that it alone is exposed to, by p Q sigma; no corridors."""
        clock, count = self.clock, len(self.book.grids)
        market = self.book.arrays.market
        own = np.diag(market.price * self.book.arrays.quantity * market.vol)
        nothing = np.zeros((0, len(clock.end)))
        empty = np.zeros((0, count))
        placed = (clock.bucket, clock.begin, clock.done, clock.weight)
        return Coupling(*placed, own, empty, np.zeros(0), nothing, nothing)

    def state(self, fractions: Array) -> tuple[Array, Array]:
        layout = self.problem.layout
        return layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size))), fractions

    def left(self, fractions: Array) -> Array:
        """(N, T) x at the ends of the intervals, by the coupling."""
        c = self.coupling
        x, y = self.state(fractions)
        result: Array = (x[c.at] - c.end * y[c.at]) * c.inside + c.untouched
        return result


CASES: dict[str, Linked] = {
    "two exchanges": Linked(("XNYS", {}), ("XLON", {})),
    "no auctions": Linked(("XNYS", {}), ("XLON", {}), profile="flat"),
    "half day in New York": Linked(("XNYS", {}), ("XLON", {}), day=NEW_YORK_HALF),
    "half day in London": Linked(("XLON", {}), ("XNYS", {}), day=LONDON_HALF),
    "lunch in Tokyo and Hong Kong": Linked(("XTKS", {}), ("XHKG", {}), ("XLON", {}), bucket=30.0),
    "odd buckets": Linked(("XTKS", {}), ("XNYS", {}), bucket=37.0),
    "windows": Linked(
        ("XNYS", {"start": "10:07", "end": "15:20"}),
        ("XNYS", {"start": "11:00"}),
        ("XLON", {"end": "12:00"}),
        ("XNYS", {}),
    ),
    "planned in the day": Linked(("XNYS", {}), ("XLON", {"start": "15:45"}), at=f"{DAY}T15:10Z"),
    "two sessions": Linked(
        ("XNYS", {"start": "2026-03-05T13:00", "end": "2026-03-06T12:00"}),
        ("XLON", {"start": "2026-03-05T15:00", "end": "2026-03-06T10:10"}),
        ("XHKG", {"start": "2026-03-06T10:30", "end": "2026-03-06T15:00"}),
    ),
    "nothing in auctions": Linked(
        ("XNYS", {"max_auction_participation": 0.0}), ("XNYS", {}), ("XLON", {})
    ),
    "round the clock": Linked(("24/7", {}), ("XNYS", {}), profile="flat", bucket=120.0),
}
every_case = pytest.mark.parametrize("case", CASES)


def _instants(grid: Grid) -> Any:
    return grid.start == grid.end


@every_case
def test_intervals_follow_one_another_and_cut_no_stage(case: str) -> None:
    """In time order, without gaps; an interval lies within one stage of each name or outside."""
    linked = CASES[case]
    start, end = linked.clock.start, linked.clock.end
    assert (end >= start).all()
    assert (start[1:] == end[:-1]).all()
    for grid in linked.book.grids:
        edges = np.unique(np.concatenate((grid.start, grid.end)).astype(np.int64))
        assert np.isin(edges, np.concatenate((start, end))).all()
        assert not ((edges[:, None] > start) & (edges[:, None] < end)).any()


@every_case
def test_auctions_that_are_instants_have_intervals_of_no_length(case: str) -> None:
    """One for each instant at which some name has one, and no others."""
    linked = CASES[case]
    empty = linked.clock.start == linked.clock.end
    grids = linked.book.grids
    instants = np.concatenate([grid.start[_instants(grid)] for grid in grids]).astype(np.int64)
    assert linked.clock.start[empty].tolist() == np.unique(instants).tolist()
    assert not linked.clock.weight[:, empty].any()


@every_case
def test_variance_shares_are_those_of_each_names_own_grid(case: str) -> None:
    """Stage by stage, spread evenly over the clock; nothing outside the name's time."""
    linked = CASES[case]
    clock = linked.clock
    share = clock.weight**2
    for own, grid in zip(share, linked.book.grids, strict=True):
        assert own.sum() == pytest.approx(grid.variance.sum(), rel=1e-14)
        for begin, end, variance_share in zip(
            grid.start.astype(np.int64), grid.end.astype(np.int64), grid.variance, strict=True
        ):
            if begin == end:
                continue
            within = (clock.start >= begin) & (clock.end <= end) & (clock.end > clock.start)
            length = (clock.end - clock.start)[within]
            expected = variance_share * length / (end - begin)
            assert own[within] == pytest.approx(expected, rel=1e-12)


@every_case
def test_a_loading_of_its_own_gives_a_name_its_own_variance(case: str) -> None:
    """The variance of its cost without feedback, to 1e-12, for any fractions."""
    linked = CASES[case]
    problem, book = linked.problem, linked.book
    for seed in range(3):
        y = feasible_fractions(replace(problem, cap=np.full_like(problem.cap, np.inf)), seed)
        exposure = linked.coupling.exposures(*linked.state(y))
        found = (exposure**2).sum(axis=1)
        shares = problem.shares(y, book.layout.entries)
        arrays = book.arrays
        base, _ = variance(arrays.stages, arrays.market, arrays.quantity, shares, arrays.initial)
        assert found == pytest.approx(book.layout.sum(base), rel=1e-12)


@every_case
def test_what_is_left_at_the_end_of_each_interval(case: str) -> None:
    """By the times alone: slices run evenly over their stages, instants count at their interval."""
    linked = CASES[case]
    clock, book, layout = linked.clock, linked.book, linked.book.layout
    y = feasible_fractions(linked.problem, 1)
    shares = linked.problem.shares(y, layout.entries) / book.arrays.quantity[layout.owner]
    found = linked.left(y)
    for number, grid in enumerate(book.grids):
        own = shares[layout.first[number] : layout.last[number] + 1]
        begin, end = grid.start.astype(np.int64), grid.end.astype(np.int64)
        for interval in range(len(clock.end)):
            now, instant = clock.end[interval], clock.start[interval] == clock.end[interval]
            part = np.clip((now - begin) / np.maximum(end - begin, 1), 0.0, 1.0)
            part = np.where(begin == end, (end < now) | ((end == now) & instant), part)
            assert found[number, interval] == pytest.approx(1.0 - own @ part, abs=1e-12)


@every_case
def test_all_is_done_in_the_end_and_nothing_in_the_beginning(case: str) -> None:
    """x falls from 1 to 0 and never rises."""
    linked = CASES[case]
    left = linked.left(feasible_fractions(linked.problem, 2))
    assert left[:, -1] == pytest.approx(0.0, abs=1e-12)
    assert (np.diff(left, axis=1) <= 1e-12).all()
    assert (left <= 1.0 + 1e-12).all()


def test_a_half_day_ends_one_name_and_not_the_other() -> None:
    """New York closes at 13:00, 18:00 UTC, London has closed at 16:35; and the other way round."""
    for case, closes in (("half day in New York", "18:00"), ("half day in London", "12:30")):
        linked = CASES[case]
        day = linked.book.date
        early = pd.Timestamp(f"{day}T{closes}Z").value
        after = linked.clock.start >= early
        lasting = linked.clock.end > linked.clock.start
        assert (linked.clock.bucket[0, after & lasting] == AFTER).all()
        assert linked.clock.weight[0].sum() < CASES["two exchanges"].clock.weight[0].sum()
        others = (linked.clock.weight[1, after] > 0.0).any()
        assert others == (case == "half day in London")


def test_a_name_stands_still_over_lunch_and_carries_risk() -> None:
    """Tokyo, 11:30 to 12:30 local, while Hong Kong trades."""
    clock = CASES["lunch in Tokyo and Hong Kong"].clock
    lunch = clock.start >= pd.Timestamp(f"{DAY}T02:30Z").value
    lunch &= clock.end <= pd.Timestamp(f"{DAY}T03:30Z").value
    assert lunch.sum() > 1
    assert (clock.begin[0, lunch] == 1.0).all()
    assert (clock.done[0, lunch] == 1.0).all()
    assert len(np.unique(clock.bucket[0, lunch])) == 1
    assert (clock.weight[0, lunch] > 0.0).all()
    assert (clock.done[1, lunch] > clock.begin[1, lunch]).all()


def test_a_name_whose_window_opens_later_waits_and_carries_risk() -> None:
    """From the list's time zero, where its market is open; none of it is traded before."""
    linked = CASES["windows"]
    clock = linked.clock
    opens = pd.Timestamp(f"{DAY}T11:00-05:00").value
    market = pd.Timestamp(f"{DAY}T09:30-05:00").value
    lasting = clock.end > clock.start
    waiting = lasting & (clock.start >= market) & (clock.end <= opens)
    assert waiting.sum() > 1
    assert (clock.bucket[1, waiting] == BEFORE).all()
    assert (clock.weight[1, waiting] > 0.0).all()
    assert (linked.left(feasible_fractions(linked.problem, 0))[1, waiting] == 1.0).all()
    begun = lasting & (clock.start >= opens) & (clock.weight[1] > 0.0)
    assert (clock.bucket[1, begun] >= 0).all()
    # as much variance in all as the name that could trade all day
    assert (clock.weight[1] ** 2).sum() == pytest.approx((clock.weight[3] ** 2).sum(), rel=1e-12)


def test_before_its_market_opens_a_name_carries_nothing() -> None:
    """London has been trading since 08:00, New York opens at 14:30 UTC."""
    clock = CASES["two exchanges"].clock
    early = clock.end <= pd.Timestamp(f"{DAY}T14:30Z").value
    early &= clock.end > clock.start
    assert early.sum() > 3
    assert (clock.bucket[0, early] == BEFORE).all()
    assert not clock.weight[0, early].any()
    assert (clock.weight[1, early] > 0.0).all()


def test_a_night_is_spread_over_its_hours_and_the_sessions_of_others() -> None:
    """x stands still in it; its variance is the overnight share of the second day."""
    linked = CASES["two sessions"]
    clock, grid = linked.clock, linked.book.grids[0]
    night = np.flatnonzero(grid.overnight)[0]
    assert grid.kind[night] == Kind.CLOSED
    begin, end = int(grid.start[night].astype(np.int64)), int(grid.end[night].astype(np.int64))
    within = (clock.start >= begin) & (clock.end <= end) & (clock.end > clock.start)
    assert within.sum() > 5
    assert (clock.weight[0, within] ** 2).sum() == pytest.approx(0.1875)
    assert (clock.begin[0, within] == 1.0).all()
    assert (clock.weight[1, within] > 0.0).any()


def test_the_clock_of_one_name_is_its_grid() -> None:
    """Each stage an interval, whole."""
    linked = Linked(("XNYS", {}))
    grid, clock = linked.book.grids[0], linked.clock
    assert clock.start.tolist() == grid.start.astype(np.int64).tolist()
    assert clock.end.tolist() == grid.end.astype(np.int64).tolist()
    assert clock.bucket[0].tolist() == list(range(len(grid)))
    assert not clock.begin.any()
    assert (clock.done == 1.0).all()


def test_names_on_one_grid_that_may_trade_at_different_times() -> None:
    """One grid, two sets of buckets: without auctions the first bucket is the half-hour."""
    linked = CASES["nothing in auctions"]
    first, second = linked.problem.layout.size[:2]
    assert second == first + 2
    clock = linked.clock
    opening = np.flatnonzero(clock.end == pd.Timestamp(f"{DAY}T14:30Z").value)[-1]
    assert clock.start[opening] == clock.end[opening]
    assert clock.bucket[0, opening] == BEFORE
    assert clock.bucket[1, opening] == linked.problem.layout.first[1]
    assert clock.done[1, opening] == 1.0
