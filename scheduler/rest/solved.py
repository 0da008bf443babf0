"""The rest of a plan, planned: one set of circumstances in, a plan of what is left out."""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd

from scheduler.constraints import with_constraints
from scheduler.intake import Book, Finish, take_in
from scheduler.plan import AIMS, Plan, plan_book, plan_list
from scheduler.rest.carried import (
    of_whole,
    outstanding,
    still_ahead,
    with_imbalance,
    with_prices_of_risk,
)
from scheduler.rest.fills import Fills
from scheduler.rest.remaining import Left, left_of, rest_inputs
from scheduler.rest.volume import in_volume
from scheduler.sessions import Grid
from scheduler.settings import Settings
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs
from scheduler.transition import is_list, signed_value


@dataclass(frozen=True)
class Origin:
    """What a rest owes to its plan.

    at : the present. risk_aversion : by symbol, the plan's implied lambda. price : by symbol, p at
    time zero, base currency. leaning : by symbol, D(Z_0) as the market sees it. grids : by symbol.
    zeros : by symbol, time zero. gross : sum of p fx Q, what corridors in % refer to.
    """

    plan: Plan
    at: pd.Timestamp
    soften: bool
    risk_aversion: Mapping[str, float]
    grids: Mapping[str, Grid]
    zeros: Mapping[str, pd.Timestamp]
    gross: float

    @property
    def day(self) -> datetime.date:
        return self.plan.book.date


@dataclass(frozen=True)
class Given:
    """The circumstances of a rest; each change replaces some of them.

    priced : symbols whose price in the market table is that of the present.
    came, ahead : by symbol, the volume so far over its forecast; what to multiply the rest's by.
    own_aim : whether the settings' aim replaces the plan's risk aversion.
    """

    inputs: Inputs
    settings: Settings
    finish: tuple[Finish, ...]
    fills: Fills
    priced: frozenset[str] = frozenset()
    came: Mapping[str, float] = field(default_factory=dict)
    ahead: Mapping[str, float] = field(default_factory=dict)
    own_aim: bool = False


@dataclass(frozen=True)
class Rest:
    """What is left of each order, and the plan of it; None where nothing can be traded any more.

    own : by symbol, own outstanding imbalance at the present, + is bought.
    """

    left: Left
    plan: Plan | None
    own: Mapping[str, float]
    notes: tuple[str, ...]


def origin_of(plan: Plan, at: pd.Timestamp, *, soften: bool) -> Origin:
    book = plan.book
    symbols = book.rows["symbol"].tolist()
    if plan.transition is None:
        rows = plan.summary["orders"].values()
        aversion = [row["risk_aversion"] for row in rows]
    else:
        aversion = [plan.summary["total"]["risk_aversion"]] * len(symbols)
    return Origin(
        plan,
        at,
        soften,
        risk_aversion=dict(zip(symbols, aversion, strict=True)),
        grids=dict(zip(symbols, book.grids, strict=True)),
        zeros={
            symbol: pd.Timestamp(grid.time_zero, tz="UTC")
            for symbol, grid in zip(symbols, book.grids, strict=True)
        },
        gross=float(np.abs(signed_value(book)).sum()),
    )


def solve_rest(origin: Origin, given: Given) -> Rest:
    """Plan what is left.

    Raises:
        InputError: more filled than asked for, windows that are none.
        InfeasibleError, NotConvergedError: as `plan` does.
    """
    day, at, fills = origin.day, origin.at, given.fills
    settings = given.settings
    if not given.own_aim:
        settings = settings.with_unset("plan", *AIMS)
    inputs = in_volume(given.inputs, given.ahead)
    left = left_of(inputs, fills, settings, day=day, at=at)
    notes = [
        f"{name}: its window is over with {shares:,.10g} shares left; give it a later end, or "
        "leave it out of orders to cancel it"
        for name, shares, over in zip(left.names, left.shares, left.over, strict=True)
        if over
    ]
    if not left.going.any():
        return Rest(left, None, {}, tuple(notes))
    reduced = rest_inputs(inputs, left, fills, gross=origin.gross, day=day, at=at)
    reduced = _with_risk_of(origin, reduced, left.rows)
    calendars = left.rows.loc[left.going, "calendar"].tolist()
    finish, past = still_ahead(given.finish, calendars, day, at)
    together = is_list(inputs)
    book = take_in(
        reduced,
        settings,
        day=day,
        at=at.isoformat(),
        finish=finish,
        together=together,
        now=at,
        came=given.came,
    )
    book = with_constraints(book, reduced)
    book = of_whole(book, left.rows.loc[left.going, "quantity"].to_numpy(dtype=float))
    zeros = _zeros(book)
    own = outstanding(
        fills,
        left,
        inputs,
        settings,
        day=day,
        at=at,
        zeros=zeros,
        grids=origin.grids,
        came=given.came,
    )
    book = with_imbalance(book, own)
    if not given.own_aim:
        book = with_prices_of_risk(book, _prices(origin, book, together=together))
    book = replace(book, notes=(*book.notes, *notes, *past))
    made = plan_list(book, reduced, soften=origin.soften) if together else plan_book(book)
    return Rest(left, made, own, made.notes)


def _with_risk_of(origin: Origin, inputs: Inputs, rows: pd.DataFrame) -> Inputs:
    """Returns of the plan as exposures to the factors found there.

    Estimated anew from fewer names, now that some are done, the shrinkage would be another.
    """
    first, transition = origin.plan.inputs, origin.plan.transition
    if first is None or transition is None or transition.risk is None:
        return inputs
    if inputs.returns is None or inputs.returns is not first.returns:
        return inputs
    book, risk = transition.book, transition.risk
    vol = dict(zip(book.rows["symbol"], book.arrays.market.vol.tolist(), strict=True))
    now = dict(zip(rows["symbol"], rows["daily_vol"].tolist(), strict=True))
    if not set(now) <= set(vol):
        return inputs
    table, names = inputs.returns, list(risk.factors)
    exposures = pd.DataFrame(risk.exposures, columns=names)
    scale = np.array([now.get(symbol, size) / size for symbol, size in vol.items()])
    exposures = exposures.mul(scale, axis=0)
    exposures.insert(0, "symbol", list(vol))
    covariance = pd.DataFrame(risk.covariance, columns=names)
    covariance.insert(0, "factor", names)
    made = [
        Checked(frame, (), table.source, np.arange(len(frame), dtype=np.int64))
        for frame in (exposures, covariance)
    ]
    return replace(inputs, returns=None, exposures=made[0], factor_covariance=made[1])


def _zeros(book: Book) -> dict[str, pd.Timestamp]:
    pairs = zip(book.rows["symbol"], book.grids, strict=True)
    return {symbol: pd.Timestamp(grid.time_zero, tz="UTC") for symbol, grid in pairs}


def _prices(origin: Origin, book: Book, *, together: bool) -> Mapping[str, float]:
    """Risk aversion by symbol; a list has one for all, new names included."""
    if not together:
        return origin.risk_aversion
    one = max(origin.risk_aversion.values())
    return dict.fromkeys(book.rows["symbol"], one)
