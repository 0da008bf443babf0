"""A book: checked orders as arrays, with what is needed to label the answer again.

Labels, units, currencies and time zones stop here. A `Book` holds the arrays of a list of orders
and what is needed to label the answer again, row by row.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import date
from functools import cached_property

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.figures import Charges
from scheduler.intake.clocks import Clocks, Finish
from scheduler.intake.market import charges_of, market_arrays
from scheduler.model.pools import Pools
from scheduler.model.ragged import Array, Ragged
from scheduler.model.stages import Stages
from scheduler.problem import Orders
from scheduler.sessions import Grid, Kind, session_on_or_after
from scheduler.settings import Settings
from scheduler.tables.cross import base_currency
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs

DEFAULT_URGENCY = 0.1


@dataclass(frozen=True)
class Book:
    """Orders as arrays, with their labels.

    rows : one row an order: the orders table joined with its symbol's market row.
    grids : the stages of each order. arrays : the task in the model's units, base currency.
    lot, min_slice : (N,) shares. cap_rate : (M,) the participation cap of each stage.
    """

    rows: pd.DataFrame
    grids: tuple[Grid, ...]
    arrays: Orders
    charges: Charges
    cap_rate: Array
    lot: Array
    min_slice: Array
    settings: Settings
    currency: str
    date: date
    at: pd.Timestamp | None
    inputs: dict[str, str]
    notes: tuple[str, ...]

    @cached_property
    def names(self) -> list[str]:
        """The order_id of every order."""
        return self.rows["order_id"].tolist()

    @property
    def layout(self) -> Ragged:
        return self.arrays.stages.layout

    @cached_property
    def kind(self) -> NDArray[np.int8]:
        return np.concatenate([grid.kind for grid in self.grids])

    @cached_property
    def pooled(self) -> Book:
        """The book with the orders of each pool as one, named after all of them."""
        pools = self.arrays.pools
        if pools is None:
            return self
        lead, stages = pools.lead, pools.lead_stages
        rows = self.rows.iloc[lead].reset_index(drop=True)
        named = self.rows["order_id"].groupby(pools.of).agg(" + ".join).to_numpy()
        return replace(
            self,
            rows=rows.assign(order_id=named, quantity=self.arrays.pooled.quantity),
            grids=tuple(self.grids[order] for order in lead),
            arrays=self.arrays.pooled,
            charges=Charges(self.charges.spread[stages], self.charges.fees[stages]),
            cap_rate=self.cap_rate[stages],
            lot=self.lot[lead],
            min_slice=self.min_slice[lead],
        )

    @property
    def must_complete(self) -> NDArray[np.bool_]:
        return self.rows["must_complete"].to_numpy(dtype=np.bool_)


def take_in(
    inputs: Inputs,
    settings: Settings,
    *,
    day: date | None = None,
    at: str | None = None,
    finish: tuple[Finish, ...] = (),
    together: bool = False,
    now: pd.Timestamp | None = None,
    came: Mapping[str, float] | None = None,
) -> Book:
    """Turn checked tables into a book of orders.

    With `together`, orders are one list: all begin at its first time zero. `now` is the present
    (UTC), where it must be the same in several books. `came` is, by symbol, the volume up to the
    planning time over its forecast, where it is known: readings fade with it.

    Raises:
        InputError: windows outside their sessions, readings after the planning time.
    """
    rows = inputs.orders.frame.merge(
        inputs.market.frame, on="symbol", how="left", suffixes=("", "_market"), validate="m:1"
    )
    now = pd.Timestamp.now(tz="UTC") if now is None else now
    day = day or session_on_or_after(str(rows["calendar"].iat[0]), now)
    clocks = Clocks(rows, inputs, settings, day, at, now, came)
    grids, notes = clocks.grids(finish)
    pool = pd.factorize(rows["symbol"])[0]
    grids, tradable = clocks.common(grids, finish, pool, together=together)
    market = market_arrays(rows, settings)
    layout = Ragged(np.array([len(grid) for grid in grids], dtype=np.int64))
    volume = _flat(grids, "volume") * market.adv[layout.owner]
    kind = np.concatenate([grid.kind for grid in grids])
    overnight = np.where(_flat(grids, "overnight") > 0.0, settings.model.overnight_relaxation, 0.0)
    stages = Stages(
        layout=layout,
        theta=(_flat(grids, "volume") + overnight) / market.relaxation[layout.owner],
        variance=_flat(grids, "variance"),
        open=kind != Kind.CLOSED,
        session=np.concatenate([grid.session for grid in grids]),
    )
    rate = _cap_rate(rows, kind, layout, settings)
    urgency, risk_aversion = _aim(settings, len(rows))
    arrays = Orders(
        stages=stages,
        market=market,
        quantity=rows["quantity"].to_numpy(dtype=float),
        initial=clocks.initial_imbalance(market, grids),
        cap=np.where(tradable, _cap(volume, rate), 0.0),
        charge=np.zeros(layout.entries),
        ceiling=clocks.ceilings(finish, grids, layout),
        urgency=urgency,
        risk_aversion=risk_aversion,
        pools=Pools(pool, layout) if len(set(pool)) < len(pool) else None,
    )
    charges = charges_of(rows, market, kind, layout, settings)
    return Book(
        rows=rows,
        grids=tuple(grids),
        arrays=replace(arrays, charge=charges.spread + charges.fees),
        charges=charges,
        cap_rate=rate,
        lot=rows["lot_size"].fillna(rows["lot_size_market"]).to_numpy(dtype=float),
        min_slice=rows["min_slice"].to_numpy(dtype=float),
        settings=settings,
        currency=base_currency(inputs.orders.frame, inputs.market.frame, settings),
        date=day,
        at=clocks.at.get(str(rows["calendar"].iat[0])),
        inputs={
            name: table.source for name, table in vars(inputs).items() if isinstance(table, Checked)
        },
        notes=(*inputs.notes, *notes, *_joined(rows), *_stale(rows, day)),
    )


def _joined(rows: pd.DataFrame) -> list[str]:
    """A note for each symbol with several orders."""
    named = rows.groupby("symbol", sort=False)["order_id"].agg(list)
    return [
        f"{' + '.join(names)}: orders of one symbol, {symbol}, are solved as one total"
        for symbol, names in named.items()
        if len(names) > 1
    ]


def _stale(rows: pd.DataFrame, day: date) -> list[str]:
    """A note if market data are older than the session planned for."""
    known = rows.loc[rows["as_of"].notna(), ["symbol", "as_of"]]
    old = known[pd.to_datetime(known["as_of"]).dt.date < day]
    if old.empty:
        return []
    names = ", ".join(sorted(old["symbol"].unique())[:10])
    return [f"market data from {old['as_of'].min()}, before {day}, for {names}"]


def _aim(settings: Settings, count: int) -> tuple[Array, Array]:
    """Urgency and risk aversion of every order; with neither set, the default urgency."""
    plan = settings.plan
    if plan.risk_aversion is not None:
        return np.zeros(count), np.full(count, plan.risk_aversion)
    urgency = DEFAULT_URGENCY if plan.urgency is None else plan.urgency
    return np.full(count, urgency), np.zeros(count)


def _cap_rate(
    rows: pd.DataFrame, kind: NDArray[np.int8], layout: Ragged, settings: Settings
) -> Array:
    """Own over total volume at most, by stage; the orders table wins over the settings."""
    plan = settings.plan
    continuous = rows["max_participation"].fillna(plan.max_participation).to_numpy(dtype=float)
    auction = rows["max_auction_participation"].fillna(plan.max_auction_participation)
    by_auction = auction.to_numpy(dtype=float)[layout.owner]
    rate = np.where(kind == Kind.AUCTION, by_auction, continuous[layout.owner])
    return np.where(kind == Kind.CLOSED, 0.0, rate)


def _cap(volume: Array, rate: Array) -> Array:
    """q <= V m/(1-m), own over total volume at most m; m = 1 is no cap, no volume no trading."""
    with np.errstate(divide="ignore", invalid="ignore"):
        cap = np.where(rate < 1.0, volume * rate / (1.0 - rate), np.inf)
    return np.where(volume > 0.0, cap, 0.0)


def _flat(grids: list[Grid], name: str) -> NDArray[np.float64]:
    result: Array = np.concatenate([getattr(grid, name) for grid in grids]).astype(float)
    return result
