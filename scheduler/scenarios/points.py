"""The orders of points of the grid: tables and settings changed, then taken in as a plan's are.

So a point is what `plan` would make of the same change, before whole lots and `min_slice`. Points
that share their settings are taken in together, as tables that hold every order once a point.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date
from types import MappingProxyType
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import HeadraceError, InfeasibleError, InputError
from scheduler.intake import Book, Finish, take_in
from scheduler.limits import incomplete
from scheduler.model.ragged import Index
from scheduler.scenarios.axes import Value
from scheduler.settings import Settings
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs

_IMPACT = ("relaxation", "impact_coefficient", "impact_exponent")
"""Columns of the market table, and settings, that stand in place of a law's own numbers."""


_SETTINGS = ("bucket", "impact_law", "feedback")
"""Axes that no table has a column for."""

_ORDERS = ("start", "end", "max_participation")
"""Axes that are columns of the orders table."""

_WIDE = 400  # rows taken in together: enough to spread what a book costs whatever its size


@dataclass(frozen=True)
class Taken:
    """A book of orders at several points: which point and which order each of its rows is.

    point, order : (N,) places among the points asked for and the base's orders. good : (N,) rows
    that keep their limits; those that could not even be taken in are not there at all.
    """

    book: Book
    point: Index
    order: Index
    good: NDArray[np.bool_]


@dataclass(frozen=True)
class Recipe:
    """All that a book of orders is made from."""

    inputs: Inputs
    settings: Settings
    day: date | None
    at: str | None
    now: pd.Timestamp
    finish: tuple[Finish, ...]

    def base(self) -> Book:
        """The book as tables and settings have it.

        Raises:
            InputError, InfeasibleError: what a plan would be refused for, too.
        """
        return self._take_in(self.inputs, self.settings)

    def books(self, points: Sequence[Mapping[str, Value]]) -> Iterator[Taken]:
        """The orders of all points, in a few books."""
        groups: dict[tuple[Value | None, ...], list[int]] = {}
        for place, values in enumerate(points):
            key = tuple(values.get(name) for name in _SETTINGS)
            groups.setdefault(key, []).append(place)
        count = len(self.inputs.orders.frame)
        each = max(1, _WIDE // count)
        for members in groups.values():
            settings = changed_settings(self.settings, points[members[0]])
            for start in range(0, len(members), each):
                chosen = np.array(members[start : start + each])
                wide = wide_tables(self.inputs, self.settings, [points[i] for i in chosen])
                rows = np.arange(count * len(chosen))
                numbered = replace(wide, orders=replace(wide.orders, rows=rows))
                book, rows = self._kept(numbered, settings, rows)
                if book is not None:
                    yield Taken(book, chosen[rows // count], rows % count, ~incomplete(book))

    def _kept(self, inputs: Inputs, settings: Settings, rows: Index) -> tuple[Book | None, Index]:
        """The book of those rows that can be taken in, and which rows those are.

        The orders table numbers its rows from 0. Windows that hold nothing are told by row. A
        finish time too early for some order is not: then each row is looked at alone.
        """
        while len(rows):
            try:
                return self._take_in(only_orders(inputs, rows), settings), rows
            except InputError as error:
                wrong = [
                    p.row
                    for p in error.problems
                    if p.source == inputs.orders.source and p.row is not None
                ]
                good = rows[~np.isin(rows, list(wrong))]
            except InfeasibleError:
                good = rows
            if len(good) == len(rows):
                fitting = [row for row in rows.tolist() if self._fits(inputs, settings, row)]
                rows = np.array(fitting, dtype=np.int64)
                break
            rows = good
        return (self._take_in(only_orders(inputs, rows), settings) if len(rows) else None), rows

    def _fits(self, inputs: Inputs, settings: Settings, row: int) -> bool:
        """Whether one row can be taken in alone."""
        try:
            self._take_in(only_orders(inputs, np.array([row])), settings)
        except HeadraceError:
            return False
        return True

    def _take_in(self, inputs: Inputs, settings: Settings) -> Book:
        return take_in(inputs, settings, day=self.day, at=self.at, finish=self.finish, now=self.now)


def changed_settings(settings: Settings, values: Mapping[str, Value]) -> Settings:
    """The settings at a point.

    An impact law other than the base's is taken as published, whatever of it they had changed.
    """
    if _other_law(settings, values):
        settings = settings.with_unset("model", *_IMPACT, "permanent")
        settings = settings.with_values("model", impact_law=values["impact_law"])
    settings = settings.with_values("model", feedback=values.get("feedback"))
    return settings.with_values("plan", bucket=values.get("bucket"))


def wide_tables(
    inputs: Inputs, settings: Settings, points: Sequence[Mapping[str, Value]]
) -> Inputs:
    """The tables with every row once a point, points after each other, and their values put in.

    The points have the same axes. A value stands for every order, also where the tables have
    their own. Symbols of several points are told apart by the point; rows keep their numbers.
    """
    orders, market, readings = inputs.orders, inputs.market, inputs.readings
    columns: dict[str, list[Any]] = {n: [values[n] for values in points] for n in points[0]}
    own = {name: columns[name] for name in _ORDERS if name in columns}
    orders = _repeated(orders, len(points), own)
    taken = _IMPACT if _other_law(settings, points[0]) else ()
    fixed: dict[str, list[Any]] = {name: [np.nan] * len(points) for name in taken}
    if "relaxation" in columns:
        fixed["relaxation"] = columns["relaxation"]
    scales = {"adv": columns.get("volume"), "daily_vol": columns.get("volatility")}
    market = _repeated(market, len(points), fixed, scales)
    if "reading" in columns:
        readings = _repeated(
            _everywhere(inputs.market), len(points), {"imbalance": columns["reading"]}
        )
    elif readings is not None:
        readings = _repeated(readings, len(points), {})
    return replace(inputs, orders=orders, market=market, readings=readings)


def _other_law(settings: Settings, values: Mapping[str, Value]) -> bool:
    return values.get("impact_law", settings.model.impact_law) != settings.model.impact_law


def _repeated(
    table: Checked,
    times: int,
    values: Mapping[str, Sequence[Any]],
    scales: Mapping[str, Sequence[Any] | None] = MappingProxyType({}),
) -> Checked:
    """A table once a point, with columns set to, or multiplied by, a value a point."""
    count = len(table.frame)
    point = np.repeat(np.arange(times), count)
    frame = table.frame.iloc[np.tile(np.arange(count), times)].reset_index(drop=True)
    if times > 1:
        frame["symbol"] = frame["symbol"] + "\n" + pd.Series(point).astype(str)
    for name, column in values.items():
        frame[name] = pd.Series(column, dtype=frame[name].dtype).to_numpy()[point]
    for name, factors in scales.items():
        if factors is not None:
            frame[name] = frame[name] * np.array(factors, dtype=float)[point]
    return replace(table, frame=frame, rows=np.tile(table.rows, times))


def _everywhere(market: Checked) -> Checked:
    """A readings table with a row for every symbol, at time zero."""
    frame = pd.DataFrame({"symbol": market.frame["symbol"], "imbalance": 0.0, "time": None})
    return Checked(frame, (), "readings", market.rows)


def only_orders(inputs: Inputs, rows: Index) -> Inputs:
    """The tables with some rows of the orders."""
    table = inputs.orders
    frame = table.frame.iloc[rows].reset_index(drop=True)
    return replace(inputs, orders=replace(table, frame=frame, rows=table.rows[rows]))
