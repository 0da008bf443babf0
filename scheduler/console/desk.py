"""A desk: checked tables with the moment they are planned for, and plans of them at any settings.

A plan here is what `plan` makes of the same tables and settings, through the same functions. An
order chosen by itself is planned with the orders that share its symbol, and without the list's
risk table and corridors.
"""

from __future__ import annotations

import datetime
import hashlib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd

from scheduler.balances import list_brief
from scheduler.errors import InputError, MisuseError, Problem
from scheduler.figures import Figures
from scheduler.intake import Book, Finish, take_in
from scheduler.plan import AIMS, Plan, asked_finish, check_aim, plan_book, plan_list
from scheduler.report.clock_axis import ClockAxis
from scheduler.scenarios import Value, fingerprints, read_grid
from scheduler.scenarios.points import changed_settings, only_orders, wide_tables
from scheduler.sessions import session_on_or_after
from scheduler.settings import DEFAULTS, Settings
from scheduler.tables.inputs import Inputs, read_inputs
from scheduler.tables.source import Source
from scheduler.transition import is_list, link, solve_list

MOVABLE = (
    "urgency",
    "max_participation",
    "start",
    "end",
    "volume",
    "volatility",
    "reading",
    "impact_law",
)
"""What can be moved, by the names that the axes of `what-if` have."""

_TIES = ("exposures", "factor_covariance", "returns", "corridors")


@dataclass(frozen=True)
class Desk:
    """Tables, settings and the moment of a session of planning.

    title : where the tables are from, in words. now : the present, the same for every plan.
    """

    title: str
    inputs: Inputs
    settings: Settings
    day: datetime.date
    at: str | None
    now: pd.Timestamp
    finish: tuple[Finish, ...] = ()
    axes: dict[str | None, ClockAxis] = field(default_factory=dict, repr=False, compare=False)

    @property
    def together(self) -> bool:
        """Whether the whole list is planned as one."""
        return is_list(self.inputs)

    @property
    def names(self) -> list[str]:
        """The order_id of every order."""
        return self.inputs.orders.frame["order_id"].tolist()

    @cached_property
    def mark(self) -> str:
        """A short digest of tables, settings and session: the same for the same view."""
        parts = [*fingerprints(self.inputs).items(), self.settings.as_dict(), self.day, self.at]
        return hashlib.sha256(repr(parts).encode()).hexdigest()[:12]

    def plan(self, order: str | None, values: Mapping[str, Any], *, brief: bool = False) -> Plan:
        """The plan of one order, or of all, with some settings in place of the tables' own.

        `brief`: without the figures that the page does not show while settings move.

        Raises:
            HeadraceError: whatever `plan` would refuse it for.
        """
        book, inputs = self.book(order, values)
        if is_list(inputs):
            return plan_list(book, inputs, brief=brief)
        return plan_book(book, brief=brief)

    def list_points(
        self, values: Mapping[str, Any], urgencies: Iterable[float]
    ) -> list[dict[str, float]]:
        """Cost and risk of the list at some urgencies, bps of its value, before whole lots."""
        book, inputs = self.book(None, values)
        transition = link(book, inputs)
        points = []
        for urgency in urgencies:
            asked = transition.asking(urgency)
            solved = solve_list(asked)
            figures = Figures(asked.book.arrays, asked.book.charges, solved.shares)
            brief = list_brief(asked, figures)
            point = {name: brief[f"{name}_bps"] for name in ("expected_cost", "cost_std")}
            points.append({"urgency": urgency, **point})
        return points

    def book(self, order: str | None, values: Mapping[str, Any]) -> tuple[Book, Inputs]:
        """The orders as arrays, and the tables they are from."""
        point = checked(values)
        urgency = point.pop("urgency", None)
        settings = changed_settings(self.settings, point)
        if urgency is not None:
            settings = settings.with_unset("plan", *AIMS).with_values("plan", urgency=urgency)
        inputs = self.inputs if order is None else self._alone(order)
        inputs = wide_tables(inputs, self.settings, [point])
        book = take_in(
            inputs,
            settings,
            day=self.day,
            at=self.at,
            finish=self.finish,
            together=is_list(inputs),
            now=self.now,
        )
        return book, inputs

    def _alone(self, order: str) -> Inputs:
        """The tables of one order and of those that share its symbol."""
        table = self.inputs.orders
        if order not in self.names:
            raise MisuseError(f"no order is called {order!r} in these tables; choose another")
        symbol = table.frame["symbol"].iat[self.names.index(order)]
        rows = np.flatnonzero((table.frame["symbol"] == symbol).to_numpy())
        alone: dict[str, Any] = dict.fromkeys(_TIES)
        return replace(only_orders(self.inputs, rows), **alone)


def open_desk(
    title: str,
    sources: Mapping[str, Source | None],
    *,
    settings: Settings = DEFAULTS,
    date: str | datetime.date | None = None,
    at: str | None = None,
    ignore_columns: Iterable[str] = (),
) -> Desk:
    """Read and check tables, by name, as `plan` does; `at` as canonical text of a moment.

    Raises:
        InputError: everything wrong with them, at once. MisuseError: aims that exclude each other.
    """
    check_aim(settings)
    given = dict(sources)
    missing = [
        Problem(name, None, None, None, "is missing", "give this table")
        for name in ("orders", "market")
        if given.get(name) is None
    ]
    if missing:
        raise InputError(missing)
    inputs = read_inputs(**given, ignore_columns=ignore_columns, settings=settings)  # type: ignore[arg-type]
    now = pd.Timestamp.now(tz="UTC").floor("min")
    day = datetime.date.fromisoformat(date) if isinstance(date, str) else date
    day = day or session_on_or_after(_first_calendar(inputs), now)
    desk = Desk(title, inputs, settings, day, at, now, asked_finish((), settings))
    desk.book(None, {})  # windows and readings fit the session
    return desk


def _first_calendar(inputs: Inputs) -> str:
    """The calendar of the first order's symbol, whose clock a date belongs to."""
    market = inputs.market.frame
    symbol = inputs.orders.frame["symbol"].iat[0]
    return str(market["calendar"].iat[market["symbol"].tolist().index(symbol)])


def checked(values: Mapping[str, Any]) -> dict[str, Value]:
    """Settings in place of the tables' own, each by its axis' rule.

    Raises:
        InputError: every unknown name and every value out of its range.
    """
    known = {name: [value] for name, value in values.items() if name in MOVABLE}
    strange = [
        Problem("console", None, name, None, "cannot be moved", f"there are {', '.join(MOVABLE)}")
        for name in values
        if name not in MOVABLE
    ]
    if strange:
        raise InputError(strange)
    if not known:
        return {}
    grid = read_grid(known)
    if len(grid) != 1:
        raise MisuseError("one value of each setting is planned at a time")
    return grid.at(1)
