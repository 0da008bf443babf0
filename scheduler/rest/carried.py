"""What a plan hands on to its rest: outstanding imbalance, the price of risk, times to finish by.

Own outstanding imbalance obeys dE = dq - E dV/L, so that of fills q_j at t_j is, at the present,

    E = sum_j q_j e^{-V(t_j, now)/L},

V the volume expected in between (times what has come of its forecast, where that is known). An
auction's fill is spread over its volume: it enters as q (1 - e^{-theta})/theta.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from datetime import date

import numpy as np
import pandas as pd

from scheduler.intake import Book, Finish
from scheduler.intake.clocks import Clocks
from scheduler.intake.market import market_arrays
from scheduler.model.ragged import Array, Index
from scheduler.model.state import build_up
from scheduler.rest.fills import Fills
from scheduler.rest.remaining import Left
from scheduler.sessions import Grid, resolve
from scheduler.settings import Settings
from scheduler.tables.inputs import Inputs


def outstanding(
    fills: Fills,
    left: Left,
    inputs: Inputs,
    settings: Settings,
    *,
    day: date,
    at: pd.Timestamp,
    zeros: Mapping[str, pd.Timestamp],
    grids: Mapping[str, Grid],
    came: Mapping[str, float],
) -> dict[str, float]:
    """Own outstanding imbalance of symbols, shares, + is bought.

    Parameters
    ----------
    zeros : by symbol, the instant at which it is wanted.
    grids : by symbol, the stages of the plan, for its auctions.
    came : by symbol, the volume that has come over its forecast; 1 where not known.
    """
    clocks = Clocks(left.rows, inputs, settings, day, at.isoformat(), at, came)
    relaxation = market_arrays(left.rows, settings).relaxation
    result = {}
    for symbol, own in fills.frame.groupby("symbol", sort=False):
        name = str(symbol)
        if name not in zeros:
            continue
        order = clocks.symbol.index(name)
        signed = own["side"].to_numpy(dtype=float) * own["quantity"].to_numpy(dtype=float)
        spread, end = _spread(
            own["instant"].to_numpy(dtype=np.int64), clocks, order, relaxation, grids
        )
        kept = spread * np.exp(-clocks.passed(order, end, zeros[name]) / relaxation[order])
        result[name] = float(signed @ kept)
    return result


def _spread(
    instants: Index, clocks: Clocks, order: int, relaxation: Array, grids: Mapping[str, Grid]
) -> tuple[Array, Index]:
    """What is left of fills once their trading is over, and when: an auction's, at its end."""
    spread, end = np.ones(len(instants)), instants.copy()
    symbol = clocks.symbol[order]
    grid = grids.get(symbol)
    for stage in () if grid is None else np.flatnonzero(grid.auction).tolist():
        assert grid is not None
        starts, ends = (int(side[stage].astype(np.int64)) for side in (grid.start, grid.end))
        inside = (starts <= instants) & (instants <= ends)
        theta = clocks.came.get(symbol, 1.0) * grid.volume[stage] / relaxation[order]
        spread[inside] = build_up(np.array([theta]))[0]
        end[inside] = ends + 1  # the auction's volume has passed with it
    return spread, end


def with_imbalance(book: Book, own: Mapping[str, float]) -> Book:
    """The book with own imbalance added to what the market leans by, in each order's direction."""
    side = book.rows["side"].to_numpy(dtype=float)
    added = np.array([own.get(symbol, 0.0) for symbol in book.rows["symbol"]])
    initial: Array = book.arrays.initial + side * added
    return replace(book, arrays=replace(book.arrays, initial=initial))


def with_prices_of_risk(book: Book, risk_aversion: Mapping[str, float]) -> Book:
    """The book asking for the plan's risk aversion where a symbol has one, else as it does."""
    symbols = book.rows["symbol"]
    known = symbols.isin(list(risk_aversion)).to_numpy()
    kept = np.array([risk_aversion.get(symbol, 0.0) for symbol in symbols])
    arrays = book.arrays
    aim = np.where(known, 0.0, arrays.urgency), np.where(known, kept, arrays.risk_aversion)
    return replace(book, arrays=arrays.asking(*aim))


def of_whole(book: Book, quantity: Array) -> Book:
    """The book with its ceilings those of the orders in full: (1 - f) of that, not of the rest."""
    owner = book.layout.owner
    ceiling = book.arrays.ceiling * (quantity / book.arrays.quantity)[owner]
    return replace(book, arrays=replace(book.arrays, ceiling=ceiling))


def still_ahead(
    finish: tuple[Finish, ...], calendars: list[str], day: date, at: pd.Timestamp
) -> tuple[tuple[Finish, ...], tuple[str, ...]]:
    """Times to finish by that are to come on every exchange, and a note for each other."""
    ahead, notes = [], []
    for item in finish:
        if all(resolve(item.time, date=day, calendar=name) > at for name in set(calendars)):
            ahead.append(item)
        else:
            notes.append(f"finish {item.fraction:.0%} by {item.time} is past: no longer asked for")
    return tuple(ahead), tuple(notes)
