"""A schedule played over sessions of the past: their prices and volumes, bucket by bucket.

A past session gives a path: the volume that came in each bucket and the average price it came at,
against the price at time zero. What our own trading would have added is the model's impact at
that session's volumes; the rest of the cost is how the price moved while shares were left to trade.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.figures import Charges, Figures
from scheduler.history import Bars, days_of, full_sessions
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.paths import Played, fills, in_volume
from scheduler.sessions import Grid, Kind
from scheduler.sessions.calendar import SECOND, Calendar

_COMPLETE = 0.5  # of the usual number of bars


@dataclass(frozen=True)
class PastPlayed:
    """One order on the sessions of the past: `session` (D,) says which in the calendar."""

    played: Played
    session: Index


def unplayable(grid: Grid, bars: Bars | None) -> str | None:
    """Why an order cannot be played over the past."""
    if bars is None or not len(bars.session):
        return "has no bars"
    if not bars.step:
        return "has daily bars only; its slices need intraday ones"
    if int(grid.session.max()) > 0:
        return "spans several sessions; only orders of one are played over the past"
    return None


def play_past(
    book: Book, figures: Figures, order: int, bars: Bars, known: Calendar, *, following: bool
) -> PastPlayed:
    """Play one order over every full session of its symbol's bars but the planned one."""
    grid, planned = book.grids[order], known.session_of(book.date)
    sessions = _usable(bars, known, planned)
    if not len(sessions):
        none = np.zeros(0)
        return PastPlayed(Played(none, none, none, none, sessions), sessions)
    edges = (_seconds(grid.start, known, planned), _seconds(grid.end, known, planned))
    volume, price = np.empty((2, len(sessions), len(grid)))
    for place, session in enumerate(sessions.tolist()):
        volume[place], price[place] = _session(bars, session, edges)
    adv, copies = float(figures.orders.market.adv[order]), np.full(len(sessions), order)
    factor = _factors(volume, grid, adv)
    orders = in_volume(figures.orders.take(copies), factor.ravel())
    _, at = figures.orders.stages.layout.take(copies)
    charges = Charges(figures.charges.spread[at], figures.charges.fees[at])
    shares = fills(orders, figures.shares[at], factor.ravel() if following else None)
    found = Figures(orders, charges, shares)
    side = float(book.rows["side"].to_numpy(dtype=float)[order])
    moved = side * orders.market.price * (shares.reshape(price.shape) * price).sum(axis=1)
    stage = np.where(shares > 0.0, np.tile(np.arange(len(grid)), len(sessions)), -1)
    last = stage.reshape(price.shape).max(axis=1)
    expected, left = found.expected_cost, found.residual
    return PastPlayed(Played(expected + moved, expected, left, found.residual_cost, last), sessions)


def _usable(bars: Bars, known: Calendar, planned: int) -> Index:
    """Full sessions before the planned one, of its hours, that traded, with half the usual bars."""
    days = days_of(bars)
    good = full_sessions(days, known) & (days.session < planned)
    good &= known.which_hours[days.session] == known.which_hours[planned]
    good &= (days.count >= _COMPLETE * np.median(days.count)) & (days.volume > 0.0)
    result: Index = days.session[good]
    return result


def _seconds(
    times: np.ndarray[tuple[int], np.dtype[np.datetime64]], known: Calendar, planned: int
) -> Array:
    """Seconds after the planned session's open."""
    result: Array = (times.astype(np.int64) - known.opens[planned]) / SECOND
    return result


def _session(bars: Bars, session: int, edges: tuple[Array, Array]) -> tuple[Array, Array]:
    """Volume in each stage, and its average price over the price at time zero, less 1.

    Within a bar volume comes evenly and the price goes straight from open to close.
    """
    here = np.flatnonzero(bars.session == session)
    start = bars.after_open[here].astype(float)
    opened, closed, traded = bars.open[here], bars.close[here], bars.volume[here]
    begin, end = edges
    volume = np.zeros(len(begin))
    worth = np.zeros(len(begin))
    for first, last, a, b, shares in zip(
        start, np.append(start[1:], start[-1] + bars.step), opened, closed, traded, strict=True
    ):
        stop = min(last, first + bars.step)
        low, high = np.maximum(begin, first), np.minimum(end, stop)
        part = np.maximum(high - low, 0.0) / (stop - first)
        middle = (0.5 * (low + high) - first) / (stop - first)
        volume += shares * part
        worth += shares * part * (a + (b - a) * middle)
    arrival = _price_at(np.array([begin[0]]), start, opened, closed, bars.step)[0]
    standing = _price_at(0.5 * (begin + end), start, opened, closed, bars.step)
    average = np.where(volume > 0.0, worth / np.where(volume > 0.0, volume, 1.0), standing)
    return volume, average / arrival - 1.0


def _price_at(time: Array, start: Array, opened: Array, closed: Array, step: int) -> Array:
    """The price at some times: along the bar, or the last close before them."""
    bar = np.clip(np.searchsorted(start, time, side="right") - 1, 0, len(start) - 1)
    part = np.clip((time - start[bar]) / step, 0.0, 1.0)
    result: Array = opened[bar] + (closed[bar] - opened[bar]) * part
    return result


def _factors(volume: Array, grid: Grid, adv: float) -> Array:
    """(D, T) volume over forecast; auctions, which bars do not show, go with their session."""
    forecast = grid.volume * adv
    seen = (grid.kind == Kind.CONTINUOUS) & (forecast > 0.0)
    total = forecast[seen].sum()
    session = volume[:, seen].sum(axis=1) / total if total > 0.0 else np.ones(len(volume))
    factor = np.where(grid.kind == Kind.AUCTION, session[:, None], 1.0)
    factor[:, seen] = volume[:, seen] / forecast[seen]
    return factor
