"""What whole orders are expected to cost: the part that is done and the part that is not.

    C = sum_j s q_j (price_j - P_0) + fees + s x (P_now - P_0) + cost of the rest against P_now,

base currency, x the shares that the rest trades. Where the present price is not given it is P_0
moved by what the model says of our own trading: D(Z_now) - D(Z_0), and the permanent part.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler.intake import Book
from scheduler.model.impact import displacement
from scheduler.model.ragged import Array
from scheduler.rest.fills import Fills
from scheduler.rest.progress import done_between
from scheduler.rest.solved import Given, Origin, Rest

SOON = pd.Timedelta(minutes=60)
LEVELS = ("left", "next_hour", "expected_cost")


def as_planned(origin: Origin, names: list[str]) -> pd.DataFrame:
    """By order, the plan's figures at the present: shares left, of the next hour, whole cost."""
    plan, at = origin.plan, origin.at
    book, shares = plan.book, plan.figures.shares
    begin = pd.Timestamp(0, tz="UTC")
    done = done_between(book, shares, begin, at)
    values = {
        "left": book.arrays.quantity - done,
        "next_hour": done_between(book, shares, at, at + SOON),
        "expected_cost": plan.figures.expected_cost,
    }
    return pd.DataFrame(values, index=book.names).reindex(names, fill_value=0.0)


def as_replanned(origin: Origin, given: Given, rest: Rest, names: list[str]) -> pd.DataFrame:
    """The same figures of a rest."""
    left = pd.Series(rest.left.shares, index=rest.left.names)
    soon, ahead = pd.Series(dtype=float), pd.Series(dtype=float)
    if rest.plan is not None:
        book, figures = rest.plan.book, rest.plan.figures
        at = origin.at
        soon = pd.Series(done_between(book, figures.shares, at, at + SOON), index=book.names)
        moved = _moved_price(origin, given, rest.plan.book)
        ahead = pd.Series(figures.expected_cost + figures.traded * moved, index=book.names)
    values = {
        "left": left.reindex(names, fill_value=0.0),
        "next_hour": soon.reindex(names, fill_value=0.0),
        "expected_cost": ahead.reindex(names, fill_value=0.0)
        + pd.Series(cost_so_far(origin, given, names), index=names),
    }
    return pd.DataFrame(values)


def _moved_price(origin: Origin, given: Given, book: Book) -> Array:
    """(N,) s (P_now - P_0), base currency a share."""
    side = book.rows["side"].to_numpy(dtype=float)
    symbols = book.rows["symbol"].tolist()
    market = book.arrays.market
    first = arrival_prices(origin, given)
    start = np.array([first[symbol] for symbol in symbols])
    before = _leaning(origin)
    leaning = side * np.array([before.get(symbol, 0.0) for symbol in symbols])
    own = displacement(market, book.arrays.initial) - leaning
    frame = given.fills.frame
    bought = (frame["side"] * frame["quantity"]).groupby(frame["symbol"]).sum()
    traded = side * np.array([float(bought.get(symbol, 0.0)) for symbol in symbols])
    own = own + market.permanent * market.vol * traded / market.adv
    quoted = np.isin(symbols, list(given.priced))
    result: Array = np.where(quoted, side * (market.price - start), start * own)
    return result


def _leaning(origin: Origin) -> dict[str, float]:
    """By symbol, D(Z_0) as the market sees it: what the arrival price already contained."""
    book = origin.plan.book
    side = book.rows["side"].to_numpy(dtype=float)
    values = side * displacement(book.arrays.market, book.arrays.initial)
    return dict(zip(book.rows["symbol"], values.tolist(), strict=True))


def arrival_prices(origin: Origin, given: Given) -> dict[str, float]:
    """By symbol, P_0 in base currency: the plan's, of new symbols that of the market table."""
    frame = given.inputs.market.frame
    now = dict(zip(frame["symbol"], frame["price"] * frame["fx"].fillna(1.0), strict=True))
    book = origin.plan.book
    return now | dict(zip(book.rows["symbol"], book.arrays.market.price.tolist(), strict=True))


def cost_so_far(origin: Origin, given: Given, names: list[str]) -> Array:
    """Of each order, fills against P_0 and their fees, base currency; buying dear is positive."""
    frame = given.fills.frame
    market = _market_rows(origin, given).reindex(frame["symbol"])
    fx = market["fx"].fillna(1.0).to_numpy(dtype=float)
    first = arrival_prices(origin, given)
    start = np.array([first[symbol] for symbol in frame["symbol"]], dtype=float)
    side, quantity, price, fee = (
        frame[name].to_numpy(dtype=float) for name in ("side", "quantity", "price", "fee")
    )
    rate = np.where(side > 0.0, market["buy_fee_bps"], market["sell_fee_bps"]).astype(float)
    expected = 1e-4 * rate * price + market["fee_per_share"].to_numpy(dtype=float)
    fees = fx * np.where(np.isnan(fee), quantity * expected, fee)
    return given.fills.by_order(names, side * quantity * (price * fx - start) + fees)


def _market_rows(origin: Origin, given: Given) -> pd.DataFrame:
    """Market rows by symbol, those of the plan included that are no longer in the table."""
    tables = [given.inputs.market.frame]
    if origin.plan.inputs is not None:
        tables.append(origin.plan.inputs.market.frame)
    return pd.concat(tables, ignore_index=True).drop_duplicates("symbol").set_index("symbol")


def average_prices(fills: Fills, names: list[str]) -> Array:
    """Of each order, currency a share; NaN where nothing has traded."""
    frame = fills.frame
    value = frame["quantity"].to_numpy(dtype=float) * frame["price"].to_numpy(dtype=float)
    done = fills.by_order(names)
    paid = fills.by_order(names, value)
    return np.where(done > 0.0, paid / np.where(done > 0.0, done, 1.0), np.nan)
