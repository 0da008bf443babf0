"""Own orders of the past with their fills, laid on grids as a plan's orders are.

An order's time runs from its start (its session's open where none is given) to the close of its
last fill's session, in the buckets of a plan, cut just before the first fill and at the last. Its
fills are added up by bucket: the model spreads them evenly over the bucket's volume. Volumes are
the profile's, of the market table's ADV: what was expected, not what came.

Slippage is s (average price / arrival price - 1), less the half spread that the market table and
`crossing_share` expect in continuous trading, over the symbol's daily volatility. Fees are no part
of it. Orders of one symbol that overlap each have a state of their own here.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from scheduler.errors import InputError, Problem
from scheduler.history.placed import AUCTION_WAIT, instants, sessions_of_instants
from scheduler.intake.market import charges_of, market_arrays
from scheduler.model.impact import impact_cost, permanent_cost
from scheduler.model.ragged import Array, Index, Ragged
from scheduler.model.risk import variance
from scheduler.model.stages import Market, Stages
from scheduler.sessions import (
    BUILT_IN,
    Grid,
    Kind,
    Profile,
    build_grid,
    default_profile,
    load_calendar,
    profile_from_frame,
    resolve,
)
from scheduler.sessions.calendar import SECOND, Calendar, timestamp
from scheduler.settings import Settings
from scheduler.tables.columns import Mask
from scheduler.tables.draft import Checked, some

_CLOCK = len("10:00:00")


@dataclass(frozen=True)
class Executed:
    """N orders, M stages. sessions : (M,) volume of each stage, in sessions of relaxation.

    stages : with theta at the market's own relaxation. shares : (M,) traded. slippage : (N,) in
    daily volatilities. day : (N,) session of the first fill.
    """

    stages: Stages
    sessions: Array
    market: Market
    shares: Array
    slippage: Array
    day: Index

    def __len__(self) -> int:
        return len(self.slippage)

    @property
    def quantity(self) -> Array:
        """(N,) shares traded."""
        return self.stages.layout.sum(self.shares)

    @property
    def _unit(self) -> Array:
        """What a slippage of 1 costs, (N,) currency."""
        result: Array = self.market.price * self.quantity * self.market.vol
        return result

    def predicted(self, exponent: float, relaxation: float) -> Array:
        """Mean impact paid by each order at a coefficient k of 1, in daily volatilities, (N,)."""
        count = len(self)
        market = replace(
            self.market,
            coefficient=np.ones(count),
            exponent=np.full(count, exponent),
            relaxation=np.full(count, relaxation),
        )
        stages = replace(self.stages, theta=self.sessions / relaxation)
        paid = impact_cost(stages, market, self.shares, np.zeros(count))
        result: Array = self.stages.layout.sum(paid) / self._unit
        return result

    @property
    def error(self) -> Array:
        """Standard deviation of each order's slippage by the model, in daily volatilities, (N,)."""
        parts = variance(self.stages, self.market, self.quantity, self.shares, np.zeros(len(self)))
        result: Array = np.sqrt(self.stages.layout.sum(parts[0] + parts[1])) / self._unit
        return result


def executed(
    fills: Checked,
    orders: Checked,
    market: Checked,
    profiles: Checked | None,
    settings: Settings,
) -> tuple[Executed, tuple[str, ...]]:
    """Orders that have fills, as arrays; and notes.

    Raises:
        InputError: fills of unknown orders, without a date, outside sessions or before their
            order's start, more than was ordered; orders without arrival price or market row.
    """
    _check(fills, orders, market)
    table, filled = fills.frame, orders.frame["order_id"].isin(fills.frame["order_id"])
    rows = orders.frame[filled].merge(
        market.frame, on="symbol", how="left", suffixes=("", "_market"), validate="m:1"
    )
    at = _instants(fills, rows.set_index("order_id")["calendar"])
    place = pd.Index(rows["order_id"]).get_indexer(table["order_id"])
    quantity, price = (table[name].to_numpy(dtype=float) for name in ("quantity", "price"))
    total = np.bincount(place, quantity).astype(np.float64)
    _check_totals(orders, filled.to_numpy(), total)
    lay = _Layer(fills, orders, profiles, settings)
    orders_at = np.flatnonzero(filled)
    for order, row in enumerate(rows.itertuples()):
        lay.add(row, int(orders_at[order]), np.flatnonzero(place == order), at)
    if lay.problems:
        raise InputError(lay.problems)
    found = lay.arrays(rows, quantity)
    average = np.bincount(place, quantity * price) / total
    arrival, side = (rows[name].to_numpy(dtype=float) for name in ("arrival_price", "side"))
    charged = _charged(found, rows, np.concatenate([grid.kind for grid in lay.grids]), settings)
    paid = side * (average / arrival - 1.0) / found.market.vol - charged
    without = orders.frame.loc[~filled, "order_id"].tolist()
    notes = (f"orders without fills, left out: {some(without)}",) if without else ()
    return replace(found, slippage=paid), notes


def _check(fills: Checked, orders: Checked, market: Checked) -> None:
    known = fills.frame["order_id"].isin(orders.frame["order_id"]).to_numpy()
    rule = f"is not in the orders table {orders.source}"
    problems = fills.problems(
        ~known, "order_id", rule, "add the order there, or leave the fill out"
    )
    undated = (fills.frame["time"].str.len() == _CLOCK).to_numpy()
    rule, remedy = "has no date", "write it as in 2026-01-05T10:00:00"
    problems += fills.problems(undated, "time", rule, remedy)
    used = orders.frame["order_id"].isin(fills.frame["order_id"])
    bare = (used & orders.frame["arrival_price"].isna()).to_numpy()
    rule, remedy = "is needed to measure slippage", "give the price when the order arrived"
    problems += orders.problems(bare, "arrival_price", rule, remedy)
    foreign = (used & ~orders.frame["symbol"].isin(market.frame["symbol"])).to_numpy()
    rule = f"is not in the market table {market.source}"
    problems += orders.problems(foreign, "symbol", rule, "add a row for it there")
    if problems:
        raise InputError(problems)


def _check_totals(orders: Checked, filled: Mask, total: Array) -> None:
    over = np.zeros(len(filled), np.bool_)
    over[filled] = total > orders.frame["quantity"].to_numpy()[filled] * (1.0 + 1e-9)
    if over.any():
        rule, remedy = "is less than its fills add up to", "correct the order, or remove fills"
        raise InputError(orders.problems(over, "quantity", rule, remedy))


def _instants(fills: Checked, calendars: pd.Series[str]) -> Index:
    """The instant of each fill, ns, on its market's clock."""
    code = fills.frame["order_id"].map(calendars).to_numpy()
    at = np.zeros(len(code), np.int64)
    for name in set(code):
        which = code == name
        at[which] = instants(fills, which, load_calendar(name))
    return at


def _charged(found: Executed, rows: pd.DataFrame, kind: Index, settings: Settings) -> Array:
    """Half spreads and lasting impact, expected and no part of the fit, (N,)."""
    layout = found.stages.layout
    charges = charges_of(rows, found.market, kind.astype(np.int8), layout, settings)
    spread = layout.sum(charges.spread * found.shares)
    result: Array = (spread + permanent_cost(found.market, found.quantity)) / found._unit
    return result


class _Layer:
    """Lays orders on their grids one by one, gathering what is wrong."""

    def __init__(
        self, fills: Checked, orders: Checked, profiles: Checked | None, settings: Settings
    ) -> None:
        self.fills, self.orders, self.profiles = fills, orders, profiles
        self.settings = settings
        self.grids: list[Grid] = []
        self.day: list[int] = []
        self.stage = np.zeros(len(fills.frame), np.int64)  # of each fill, all orders end to end
        self.count = 0
        self.problems: list[Problem] = []

    def add(self, row: Any, order: int, mine: Index, at: Index) -> None:
        """An order (position in the orders table) with its fills (positions in the fills table)."""
        calendar, start = row.calendar, row.start
        known, when = load_calendar(calendar), at[mine]
        session = sessions_of_instants(when, when + 1, known)
        outside = session < 0
        if outside.any():
            rule = f"is outside the sessions of {known.code}"
            return self._flag(mine[outside], rule, "check time, offset and calendar")
        first, last = int(session.min()), int(session.max())
        try:
            grid = self._grid(row, known, start, (first, last), when)
        except InputError as error:
            rows = int(self.orders.rows[order])
            self.problems += [
                replace(each, source=self.orders.source, row=rows) for each in error.problems
            ]
            return None
        early = when < grid.start[0].astype(np.int64)
        if early.any():
            return self._flag(mine[early], "is before its order's start", "correct one of the two")
        self.stage[mine] = self.count + _stage_of(grid, when)
        self.grids.append(grid)
        self.day.append(first)
        self.count += len(grid)
        return None

    def _flag(self, rows: Index, rule: str, remedy: str) -> None:
        mask = np.zeros(len(self.fills.frame), np.bool_)
        mask[rows] = True
        self.problems += self.fills.problems(mask, "time", rule, remedy)

    def _grid(
        self,
        row: Any,
        known: Calendar,
        start: str | None,
        sessions: tuple[int, int],
        when: Index,
    ) -> Grid:
        first, last = sessions
        begins = None if first == last else timestamp(known.opens[first])
        if start is not None:
            begins = resolve(start, date=known.date_of(first), calendar=known.code)
        grid, _ = build_grid(
            known.code,
            self._profile(row.profile, known.code),
            date=known.date_of(last),
            start=begins,
            bucket=self.settings.plan.bucket,
            overnight_share=self.settings.model.overnight_share,
            cuts=(timestamp(when.min() - 1), timestamp(when.max())),
        )
        return grid

    def _profile(self, name: object, calendar: str) -> Profile | str:
        if not isinstance(name, str):
            return default_profile(calendar)
        if name in BUILT_IN or self.profiles is None:
            return name
        return profile_from_frame(self.profiles.frame, name)

    def arrays(self, rows: pd.DataFrame, quantity: Array) -> Executed:
        layout = Ragged(np.array([len(grid) for grid in self.grids], dtype=np.int64))
        market = market_arrays(rows, self.settings)

        def flat(name: str) -> Array:
            result: Array = np.concatenate([getattr(grid, name) for grid in self.grids])
            return result

        night = np.where(flat("overnight"), self.settings.model.overnight_relaxation, 0.0)
        sessions = flat("volume") + night
        stages = Stages(
            layout=layout,
            theta=sessions / market.relaxation[layout.owner],
            variance=flat("variance"),
            open=flat("kind") != Kind.CLOSED,
            session=flat("session").astype(np.int64),
        )
        shares = np.bincount(self.stage, quantity, layout.entries).astype(np.float64)
        nothing = np.zeros(len(rows))
        return Executed(stages, sessions, market, shares, nothing, np.array(self.day))


def _stage_of(grid: Grid, when: Index) -> Index:
    """The stage of each fill: (start, end], after a close the last of that session."""
    open_stages = np.flatnonzero(grid.open)
    start, end = (edge[open_stages].astype(np.int64) for edge in (grid.start, grid.end))
    place = np.minimum(np.searchsorted(end, when, side="left"), len(end) - 1)
    late = (place > 0) & (when < start[place]) & (when <= end[place - 1] + AUCTION_WAIT * SECOND)
    result: Index = open_stages[np.where(late, place - 1, place)]
    return result
