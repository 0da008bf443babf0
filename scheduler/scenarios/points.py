"""The orders of a point of the grid: tables and settings changed, then taken in as a plan's are.

So a point is what `plan` would make of the same change, before whole lots and `min_slice`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import date
from typing import Any

import numpy as np
import pandas as pd

from scheduler.errors import HeadraceError
from scheduler.intake import Book, Finish, take_in
from scheduler.limits import incomplete
from scheduler.model.ragged import Index
from scheduler.scenarios.axes import AIMS, Value
from scheduler.settings import Settings
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs

_IMPACT = ("relaxation", "impact_coefficient", "impact_exponent")
"""Columns of the market table, and settings, that stand in place of a law's own numbers."""


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

    def book(self, values: Mapping[str, Value]) -> tuple[Book | None, Index]:
        """The book at a point, and which orders it holds: those that keep their limits there."""
        inputs, settings = changed(self.inputs, self.settings, values)
        kept = np.arange(len(inputs.orders.frame))
        try:
            book = self._take_in(inputs, settings)
        except HeadraceError:  # some window is empty, some finish time too early: which order's?
            kept = np.array(
                [i for i in kept.tolist() if self._fits(inputs, settings, i)], dtype=int
            )
            if not len(kept):
                return None, kept
            book = self._take_in(_only(inputs, kept), settings)
        possible = ~incomplete(book)
        if possible.all():
            return book, kept
        kept = kept[possible]
        return (self._take_in(_only(inputs, kept), settings) if len(kept) else None), kept

    def _take_in(self, inputs: Inputs, settings: Settings) -> Book:
        return take_in(inputs, settings, day=self.day, at=self.at, finish=self.finish, now=self.now)

    def _fits(self, inputs: Inputs, settings: Settings, order: int) -> bool:
        try:
            self._take_in(_only(inputs, np.array([order])), settings)
        except HeadraceError:
            return False
        return True


def changed(
    inputs: Inputs, settings: Settings, values: Mapping[str, Value]
) -> tuple[Inputs, Settings]:
    """Tables and settings with a point's values in place of their own.

    A value stands for every order, also where the orders or the market table has its own. An
    impact law other than the base's is taken as published, whatever of it those had changed.
    """
    orders, market, readings = inputs.orders, inputs.market, inputs.readings
    for name in ("start", "end", "max_participation"):
        if name in values:
            orders = _with(orders, **{name: values[name]})
    if values.get("impact_law", settings.model.impact_law) != settings.model.impact_law:
        settings = settings.with_unset("model", *_IMPACT, "permanent")
        settings = settings.with_values("model", impact_law=values["impact_law"])
        market = _with(market, **dict.fromkeys(_IMPACT, np.nan))
    if "relaxation" in values:
        settings = settings.with_values("model", relaxation=values["relaxation"])
        market = _with(market, relaxation=np.nan)
    for axis, column in (("volume", "adv"), ("volatility", "daily_vol")):
        if axis in values:
            market = _with(market, **{column: market.frame[column] * float(values[axis])})
    if "reading" in values:
        readings = _everywhere(market, float(values["reading"]))
    settings = settings.with_values("model", feedback=values.get("feedback"))
    settings = settings.with_values("plan", bucket=values.get("bucket"))
    for aim in AIMS:
        if aim in values:
            settings = settings.with_unset("plan", *AIMS).with_values("plan", **{aim: values[aim]})
    return replace(inputs, orders=orders, market=market, readings=readings), settings


def _with(table: Checked, **columns: Any) -> Checked:
    return replace(table, frame=table.frame.assign(**columns))


def _everywhere(market: Checked, imbalance: float) -> Checked:
    """A readings table with one imbalance for every symbol, at time zero."""
    symbols = market.frame["symbol"]
    frame = pd.DataFrame({"symbol": symbols, "imbalance": imbalance, "time": None})
    return Checked(frame, (), "readings", market.rows)


def _only(inputs: Inputs, orders: Index) -> Inputs:
    table = inputs.orders
    frame = table.frame.iloc[orders].reset_index(drop=True)
    return replace(inputs, orders=replace(table, frame=frame, rows=table.rows[orders]))
