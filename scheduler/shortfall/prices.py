"""What the market traded at beside the fills: from bars, and from prices at the close.

Within a bar volume comes evenly and the price goes straight from open to close.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.history import Bars, place
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.sessions import Grid, Kind
from scheduler.sessions.calendar import SECOND, Calendar, load_calendar
from scheduler.tables.draft import Checked

_LEAST = 0.1  # of a forecast: less is bars that miss something, not a market that stopped


@dataclass(frozen=True)
class Tape:
    """One symbol's intraday bars in time order, (B,): ns UTC, currency a share, shares."""

    start: Index
    stop: Index
    open: Array
    close: Array
    volume: Array

    def price_at(self, instant: Index) -> Array:
        """The price at some instants: along the bar, after it its close; NaN before the first."""
        bar = np.searchsorted(self.start, instant, side="right") - 1
        at = np.maximum(bar, 0)
        part = np.clip((instant - self.start[at]) / (self.stop[at] - self.start[at]), 0.0, 1.0)
        along = self.open[at] + (self.close[at] - self.open[at]) * part
        return np.where(bar >= 0, along, np.nan)

    def volumes(self, begin: Index, end: Index) -> tuple[Array, NDArray[np.bool_]]:
        """Shares of all in each of some periods, and whether bars cover all of the period."""
        low = np.maximum(self.start, begin[:, None])
        high = np.minimum(self.stop, end[:, None])
        time = np.maximum(high - low, 0)
        shares = (self.volume * time / (self.stop - self.start)).sum(axis=1)
        return shares, time.sum(axis=1) >= (end - begin)

    def over(self, begin: int, end: int) -> tuple[float, float, float]:
        """Volume, and the volume- and the time-weighted price, between two instants."""
        length = (self.stop - self.start).astype(float)
        low, high = np.maximum(self.start, begin), np.minimum(self.stop, end)
        part = np.maximum(high - low, 0) / length
        middle = (0.5 * (low + high) - self.start) / length
        price = self.open + (self.close - self.open) * middle
        shares = self.volume * part
        time = part * length
        return float(shares.sum()), _mean(price, shares), _mean(price, time)


def _mean(price: Array, weight: Array) -> float:
    total = float(weight.sum())
    return float(price @ weight) / total if total > 0.0 else float("nan")


@dataclass(frozen=True)
class Market:
    """Market prices of each order, (N,), currency a share; NaN where not known.

    at_zero : at its time zero. close : at the end of its last session. vwap, twap : from time
    zero to its last fill. volume : shares of all in that time. at_fill : (F,).
    """

    at_zero: Array
    close: Array
    vwap: Array
    twap: Array
    volume: Array
    at_fill: Array
    tapes: dict[str, Tape]
    notes: tuple[str, ...]


def market_of(
    book: Book, bars: Checked | None, closes: Checked | None, order: Index, instant: Index
) -> Market:
    """Market prices beside fills, of which `order` and `instant` are given, (F,)."""
    count = len(book.names)
    columns = {
        name: np.full(count, np.nan) for name in ("at_zero", "close", "vwap", "twap", "volume")
    }
    at_fill = np.full(len(order), np.nan)
    tapes, last, notes = ({}, {}, ()) if bars is None else _read(book, bars)
    for one in range(count):
        symbol = str(book.rows["symbol"].iat[one])
        columns["close"][one] = last.get((symbol, _last_session(book, one)), np.nan)
        tape = tapes.get(symbol)
        if tape is None:
            continue
        mine = np.flatnonzero(order == one)
        found = tape.price_at(instant[mine])
        at_fill[mine] = np.nan if np.isnan(found).any() else found  # all of an order, or none
        zero = _ns(book.grids[one].time_zero)
        columns["at_zero"][one] = tape.price_at(np.array([zero]))[0]
        if len(mine):
            traded = tape.over(zero, max(int(instant[mine].max()), zero + 1))
            for name, value in zip(("volume", "vwap", "twap"), traded, strict=True):
                columns[name][one] = value
    if closes is not None:
        given = closes.frame.set_index("symbol")["close"]
        theirs = book.rows["symbol"].map(given).to_numpy(dtype=float)
        columns["close"] = np.where(np.isnan(theirs), columns["close"], theirs)
    return Market(**columns, at_fill=at_fill, tapes=tapes, notes=notes)


def volume_factors(book: Book, tapes: dict[str, Tape], flow: Array) -> Array:
    """(M,) the others' volume that bars show at each stage over its forecast; 1 where they do not.

    Own fills `flow` (M,) are taken off. Auctions, which bars may not show, go with their session.
    """
    layout, result = book.layout, np.ones(book.layout.entries)
    for order, grid in enumerate(book.grids):
        tape = tapes.get(str(book.rows["symbol"].iat[order]))
        if tape is None:
            continue
        span = slice(layout.first[order], layout.last[order] + 1)
        forecast = grid.volume * book.arrays.market.adv[order]
        volume, covered = tape.volumes(grid.start.astype(np.int64), grid.end.astype(np.int64))
        seen = covered & (grid.kind == Kind.CONTINUOUS) & (forecast > 0.0)
        came = np.maximum(volume - flow[span], _LEAST * forecast)
        for session in np.unique(grid.session[seen]).tolist():
            here = (grid.session == session) & grid.open
            counted = seen & here
            whole = came[counted].sum() / forecast[counted].sum()
            result[span][here & grid.auction] = whole
        result[span][seen] = came[seen] / forecast[seen]
    return result


def _ns(instant: np.datetime64) -> int:
    return int(instant.astype("datetime64[ns]").astype(np.int64))


def _last_session(book: Book, order: int) -> int:
    """The calendar's number of the session in which an order ends."""
    grid: Grid = book.grids[order]
    known = load_calendar(str(book.rows["calendar"].iat[order]))
    start = _ns(grid.start[grid.open][-1])
    return int(np.searchsorted(known.closes, start, side="left"))


def _read(
    book: Book, bars: Checked
) -> tuple[dict[str, Tape], dict[tuple[str, int], float], tuple[str, ...]]:
    """Intraday bars by symbol, closes by symbol and session, and notes."""
    tapes: dict[str, Tape] = {}
    last: dict[tuple[str, int], float] = {}
    notes: list[str] = []
    for code, rows in book.rows.groupby("calendar", sort=False):
        known, wanted = load_calendar(str(code)), set(rows["symbol"])
        theirs = bars.frame["symbol"].isin(wanted).to_numpy()
        if not theirs.any():
            continue
        frame = bars.frame[theirs].reset_index(drop=True)
        found, said = place(replace(bars, frame=frame, rows=bars.rows[theirs]), known)
        notes += said
        for one in found:
            ends = np.flatnonzero(np.diff(one.session, append=-1) != 0)
            closes = zip(one.session[ends].tolist(), one.close[ends].tolist(), strict=True)
            last |= {(one.symbol, session): close for session, close in closes}
            if one.step and len(one.session):
                tapes[one.symbol] = _tape(one, known)
    missing = sorted(set(book.rows["symbol"]) - {symbol for symbol, _ in last})
    if missing:
        notes.append(f"no bars in any session of {', '.join(missing)}")
    return tapes, last, tuple(notes)


def _tape(bars: Bars, known: Calendar) -> Tape:
    start = known.opens[bars.session] + bars.after_open * SECOND
    stop = start + bars.step * SECOND
    stop[:-1] = np.minimum(stop[:-1], start[1:])
    return Tape(start, stop, bars.open, bars.close, bars.volume)
