"""Windows, planning time, readings and finish times, resolved on each order's exchange."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import date
from types import EllipsisType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InfeasibleError, InputError, MisuseError, Problem
from scheduler.model.ragged import Array, Index, Ragged
from scheduler.model.stages import Market
from scheduler.sessions import (
    BUILT_IN,
    Grid,
    Kind,
    Profile,
    build_grid,
    default_profile,
    planning_time,
    profile_from_frame,
    resolve,
    volume_since,
)
from scheduler.settings import Settings
from scheduler.tables.cells import CellError
from scheduler.tables.inputs import Inputs
from scheduler.tables.times import moment


@dataclass(frozen=True)
class Finish:
    """At least this fraction of every order is to be done by `time` (text of a moment)."""

    fraction: float
    time: str

    @property
    def text(self) -> str:
        """As `parse` reads it."""
        return f"{self.fraction!r}@{self.time}"

    @classmethod
    def parse(cls, text: str) -> Finish:
        """Read `0.9@14:30`.

        Raises:
            MisuseError: no fraction above 0 and up to 1, or no time.
        """
        fraction, _, time = text.strip().partition("@")
        try:
            made = cls(float(fraction), moment(time))
        except (ValueError, CellError):
            made = cls(0.0, "")
        if not 0.0 < made.fraction <= 1.0:
            raise MisuseError(
                f"finish {text!r} is no fraction and time; write it as in 0.9@14:30, with a "
                "fraction above 0 and up to 1"
            )
        return made


class Clocks:
    """Windows, planning time, readings and finish times, resolved on each order's exchange.

    came : by symbol, the volume up to the planning time over its forecast, where it is known.
    """

    def __init__(
        self,
        rows: pd.DataFrame,
        inputs: Inputs,
        settings: Settings,
        day: date,
        at: str | None,
        now: pd.Timestamp,
        came: Mapping[str, float] | None = None,
    ) -> None:
        self.inputs, self.settings, self.day = inputs, settings, day
        self.came = came or {}
        self.calendar: list[str] = rows["calendar"].tolist()
        self.start: list[str | None] = rows["start"].tolist()
        self.end: list[str | None] = rows["end"].tolist()
        self.profile: list[str | None] = rows["profile"].tolist()
        self.symbol: list[str] = rows["symbol"].tolist()
        self.order_id: list[str] = rows["order_id"].tolist()
        self.side, self.quantity = (
            rows[name].to_numpy(dtype=float) for name in ("side", "quantity")
        )
        self.profiles = self._profiles()
        # one instant for all exchanges: a time without offset is on the first order's clock
        given = None if at is None else resolve(at, date=day, calendar=self.calendar[0])
        self.at = {
            name: planning_time(name, day, now) if given is None else given
            for name in set(self.calendar)
        }

    def _profiles(self) -> list[Profile | str]:
        """The profile of each order: a built-in one by name, or one of the profiles table."""
        frame = None if self.inputs.profiles is None else self.inputs.profiles.frame
        own: dict[str, Profile] = {}
        result: list[Profile | str] = []
        for name, clock in zip(self.profile, self.calendar, strict=True):
            if not isinstance(name, str):
                result.append(default_profile(clock))
            elif name in BUILT_IN or frame is None:
                result.append(name)
            else:
                own[name] = own.get(name) or profile_from_frame(frame, name)
                result.append(own[name])
        return result

    def instant(self, text: str | None, order: int) -> pd.Timestamp | None:
        """The instant a text of the order's row names on its exchange's clock."""
        if text is None:
            return None
        return resolve(text, date=self.day, calendar=self.calendar[order])

    def grids(self, finish: tuple[Finish, ...]) -> tuple[list[Grid], list[str]]:
        """The stages of every order; problems name the order's row."""
        grids, notes, problems = [], [], []
        for order in range(len(self.calendar)):
            try:
                grid, found = self._grid(order, finish)
            except InputError as error:
                problems += [self._placed(problem, order) for problem in error.problems]
                continue
            grids.append(grid)
            found = (*found, *self._idle(order, finish, grid))
            notes += [f"{self.order_id[order]}: {note}" for note in found]
        if problems:
            raise InputError(problems)
        return grids, notes

    def common(
        self, grids: list[Grid], finish: tuple[Finish, ...], pool: Index, *, together: bool
    ) -> tuple[list[Grid], NDArray[np.bool_]]:
        """One grid for the orders of a pool, and which of its stages each may trade in.

        A pool begins at its first time zero, or, with `together`, at the list's. Orders whose
        window has not opened wait: the stages before it carry risk, but no slices.
        """
        zeros = np.array([grid.time_zero for grid in grids])
        longer = list(grids)
        for number in range(int(pool.max()) + 1):
            members = np.flatnonzero(pool == number).tolist()
            zero = zeros.min() if together else zeros[members].min()
            if len(members) == 1 and zeros[members[0]] == zero:
                continue
            grid = self._pool_grid(grids, members, zero, finish)
            for order in members:
                longer[order] = grid
        pairs = zip(longer, grids, strict=True)
        return longer, np.concatenate([_within(grid, own) for grid, own in pairs])

    def _pool_grid(
        self,
        grids: list[Grid],
        members: list[int],
        zero: np.datetime64,
        finish: tuple[Finish, ...],
    ) -> Grid:
        """A grid over all windows of some orders, from time zero on, cut where one begins or ends.

        A window without a given start or end has the auction there, which one given has not.
        """
        early = min(members, key=lambda i: (grids[i].time_zero, self.start[i] is not None))
        late = max(members, key=lambda i: (grids[i].end[-1], self.end[i] is None))
        start = self.instant(self.start[early], early)
        if grids[early].time_zero > zero:
            start = pd.Timestamp(zero, tz="UTC")
        edges = {edge for i in members for edge in (grids[i].time_zero, grids[i].end[-1])}
        cuts = tuple(pd.Timestamp(edge, tz="UTC") for edge in sorted(edges - {zero}))
        grid, _ = self._grid(
            early, finish, start=start, end=self.instant(self.end[late], late), cuts=cuts
        )
        return grid

    def grid(self, order: int) -> Grid:
        """The stages of one order.

        Raises:
            InputError: nothing of its window is left, or it never was one.
        """
        return self._grid(order, ())[0]

    def _grid(
        self,
        order: int,
        finish: tuple[Finish, ...],
        *,
        start: pd.Timestamp | EllipsisType | None = ...,
        end: pd.Timestamp | EllipsisType | None = ...,
        cuts: tuple[pd.Timestamp, ...] = (),
    ) -> tuple[Grid, tuple[str, ...]]:
        """The stages of an order, or of another window of its symbol, cut at its finish times."""
        finishes = tuple(self._finish_time(item, order) for item in finish)
        return build_grid(
            self.calendar[order],
            self.profiles[order],
            date=self.day,
            start=self.instant(self.start[order], order) if start is ... else start,
            end=self.instant(self.end[order], order) if end is ... else end,
            at=self.at[self.calendar[order]],
            bucket=self.settings.plan.bucket,
            overnight_share=self.settings.model.overnight_share,
            cuts=(*finishes, *cuts),
        )

    def _finish_time(self, item: Finish, order: int) -> pd.Timestamp:
        time = self.instant(item.time, order)
        assert time is not None
        return time

    def _idle(self, order: int, finish: tuple[Finish, ...], grid: Grid) -> list[str]:
        """The finish times that ask nothing of an order because it has ended before them."""
        end = pd.Timestamp(grid.end[-1], tz="UTC")
        return [
            f"finish {item.fraction:.0%} by {item.time} is after its end, {grid.local_end[-1]}"
            for item in finish
            if self._finish_time(item, order) > end
        ]

    def _placed(self, problem: Problem, order: int) -> Problem:
        orders = self.inputs.orders
        column = problem.column
        value = problem.value
        if column in ("start", "end") and value is None:
            value = getattr(self, column)[order]
        return replace(problem, source=orders.source, row=int(orders.rows[order]), value=value)

    def ceilings(self, finish: tuple[Finish, ...], grids: list[Grid], layout: Ragged) -> Array:
        """Most shares left after each stage, from the finish times.

        Raises:
            InfeasibleError: a finish time before anything of an order can have traded.
        """
        result = np.full(layout.entries, np.inf)
        for order, grid in enumerate(grids):
            quantity = self.quantity[order]
            for item in finish:
                time = self._finish_time(item, order).tz_localize(None).to_datetime64()
                ended = np.flatnonzero(grid.end <= time)
                if not len(ended):
                    raise InfeasibleError(
                        f"order {self.order_id[order]}: finish asks for {item.fraction:.0%} by "
                        f"{item.time}, but its time begins at {grid.local_start[0]}; finish later"
                    )
                at = layout.first[order] + ended[-1]
                result[at] = min(result[at], (1.0 - item.fraction) * quantity)
        return result

    def initial_imbalance(self, market: Market, grids: list[Grid]) -> Array:
        """A(0) = w s iota L of each order, relaxed from the reading's time to time zero."""
        initial = np.zeros(len(self.calendar))
        if self.inputs.readings is None:
            return initial
        strength = self.settings.model.reading_weight * self.side * market.relaxation_volume
        for order, grid in enumerate(grids):
            zero = pd.Timestamp(grid.time_zero, tz="UTC")
            found = self._reading(order, zero)
            if found is not None:
                value, taken = found
                passed = self.passed(order, np.array([taken.value]), zero)[0]
                faded = np.exp(-passed / market.relaxation[order])
                initial[order] = strength[order] * value * faded
        return initial

    def passed(self, order: int, starts: Index, end: pd.Timestamp) -> Array:
        """Sessions of volume, and of overnight relaxation, from instants (n,), ns UTC, to one end.

        Expected ones; up to the planning time as they came, where that is known.
        """
        market = self.calendar[order], self.profiles[order]
        volume, nights = volume_since(*market, starts, end)
        came = self.came.get(self.symbol[order], 1.0)
        if came != 1.0:
            now = min(self.at[self.calendar[order]], end)
            volume = volume + (came - 1.0) * volume_since(*market, starts, now)[0]
        result: Array = volume + self.settings.model.overnight_relaxation * nights
        return result

    def _reading(self, order: int, zero: pd.Timestamp) -> tuple[float, pd.Timestamp] | None:
        """The latest reading of the order's symbol and its time, which is time zero if not given.

        A reading later than the planning time is refused: it cannot be known yet.
        """
        table = self.inputs.readings
        assert table is not None
        symbols, times = table.frame["symbol"].tolist(), table.frame["time"].tolist()
        values = table.frame["imbalance"].to_numpy(dtype=float)
        at = self.at[self.calendar[order]]
        latest: tuple[float, pd.Timestamp] | None = None
        for row in (row for row, name in enumerate(symbols) if name == self.symbol[order]):
            taken = self.instant(times[row], order)
            if taken is not None and taken > at:
                rule = f"is after the planning time {at.isoformat()}"
                mask = np.arange(len(symbols)) == row
                raise InputError(table.problems(mask, "time", rule, "remove it, or plan later"))
            taken = zero if taken is None else taken
            if latest is None or taken >= latest[1]:
                latest = float(values[row]), taken
        return latest


def _within(grid: Grid, own: Grid) -> NDArray[np.bool_]:
    """Which stages of a grid lie in an order's own window; an auction must be one of its own."""
    inside = (grid.start >= own.start[0]) & (grid.end <= own.end[-1])
    ends = own.end[own.kind == Kind.AUCTION]
    begins = own.start[own.kind == Kind.AUCTION]
    auction = np.isin(grid.end, ends) & np.isin(grid.start, begins)
    result: NDArray[np.bool_] = np.where(grid.kind == Kind.AUCTION, auction, inside)
    return result
