"""A plan, its fills and the market's prices beside them, taken in as arrays."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from scheduler.errors import InputError, Problem
from scheduler.figures import Figures
from scheduler.model.ragged import Array
from scheduler.plan import Plan
from scheduler.rest.fills import Fills, place_fills
from scheduler.shortfall.parts import Benchmarks, Dealt
from scheduler.shortfall.prices import Market, market_of, volume_factors
from scheduler.shortfall.traded import Laid, figures_of, in_the_volume, lay
from scheduler.tables.draft import Checked

_ANY_TIME = pd.Timestamp.max.tz_localize("UTC")  # `lay` says what is too late


@dataclass(frozen=True)
class Taken:
    """A plan, its fills and the market's prices, as arrays; money in base currency.

    traded : the model's figures of what was traded, in the volume that came. volume : (M,)
    shares of the others at each stage: as bars show it, else as expected.
    """

    plan: Plan
    fills: Fills
    laid: Laid
    market: Market
    side: Array
    fx: Array
    prices: Benchmarks
    dealt: Dealt
    traded: Figures
    volume: Array


def take(plan: Plan, checked: Checked, bars: Checked | None, closes: Checked | None) -> Taken:
    """Take in a plan and the checked tables of what came of it.

    Raises:
        InputError: fills that do not fit the plan; an order left undone without a price for that.
    """
    book = plan.book
    since = {
        name: pd.Timestamp(grid.time_zero, tz="UTC").value
        for name, grid in zip(book.names, book.grids, strict=True)
    }
    fills = place_fills(checked, book.rows, day=book.date, since=since, at=_ANY_TIME)
    laid = lay(book, fills, checked)
    instant = fills.frame["instant"].to_numpy(dtype=np.int64)
    market = market_of(book, bars, closes, laid.order, instant)
    fx = book.rows["fx"].fillna(1.0).to_numpy(dtype=float)
    prices = _benchmarks(plan, market, fx)
    _check_given_up(plan, fills, prices)
    shares, price, fee = (
        fills.frame[name].to_numpy(dtype=float) for name in ("quantity", "price", "fee")
    )
    rate = fx[laid.order]
    usual = shares * book.charges.fees[laid.stage]
    fee = np.where(np.isnan(fee), usual, fee * rate)
    dealt = Dealt(laid.order, shares, price * rate, fee, market.at_fill * rate)
    traded = figures_of(plan.figures, laid, shares)
    came = volume_factors(book, market.tapes, traded.flow)
    traded = in_the_volume(traded, came)
    forecast = np.concatenate([grid.volume for grid in book.grids])
    volume = came * forecast * book.arrays.market.adv[book.layout.owner]
    side = book.rows["side"].to_numpy(dtype=float)
    return Taken(plan, fills, laid, market, side, fx, prices, dealt, traded, volume)


def _benchmarks(plan: Plan, market: Market, fx: Array) -> Benchmarks:
    """Decision, arrival and end, base currency.

    The plan's price is that at the planning time; an order that begins later arrives at the price
    that bars show then, if they do.
    """
    book = plan.book
    known = book.rows["price"].to_numpy(dtype=float)
    benchmark = book.rows["arrival_price"].to_numpy(dtype=float)
    waits = begins_later(plan) & ~np.isnan(market.at_zero)
    return Benchmarks(
        decision=fx * np.where(np.isnan(benchmark), known, benchmark),
        arrival=fx * np.where(waits, market.at_zero, known),
        given_up=fx * market.close,
    )


def begins_later(plan: Plan) -> np.ndarray[Any, np.dtype[np.bool_]]:
    """Which orders begin after the planning time."""
    at = plan.book.at
    zeros = [pd.Timestamp(grid.time_zero, tz="UTC") for grid in plan.book.grids]
    return np.array([at is not None and zero > at for zero in zeros])


def _check_given_up(plan: Plan, fills: Fills, prices: Benchmarks) -> None:
    book = plan.book
    undone = book.arrays.quantity - fills.by_order(book.names)
    open_ended = (undone > 1e-9 * book.arrays.quantity) & np.isnan(prices.given_up)
    if open_ended.any():
        raise InputError(
            Problem(
                "closes",
                None,
                "close",
                None,
                f"{undone[one]:,.10g} shares of {book.names[one]} were not traded, and no price is "
                f"known at which {book.rows['symbol'].iat[one]} was given up",
                "give a closes table, or bars up to the close",
            )
            for one in np.flatnonzero(open_ended).tolist()
        )
