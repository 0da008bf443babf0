"""The shape of the day: how volume and variance spread over a normal full session.

Volume: each session's shares by interval, averaged over sessions. Variance: squared log returns by
interval, averaged over sessions and then divided by their total (an average of each session's
shares would flatten the curve: a large square enlarges its own total). Both averages are trimmed.
The curve is then drawn a little towards an even one, as if one even session had been seen as well:
it vanishes with more sessions, and leaves no open interval without share.

A bar that starts at the close or up to `AUCTION_WAIT` after it is the closing auction: it has
volume and no variance. An opening auction cannot be told from the first bar.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from scheduler.history.placed import Bars
from scheduler.history.trimmed import trimmed_mean
from scheduler.sessions.builtin import CLOSED_RATE
from scheduler.sessions.calendar import Hours

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

SHORTEST = 15 * 60
"""Seconds of the shortest interval; shorter bars are put together."""


@dataclass(frozen=True, eq=False)
class Shape:
    """Rows in time order, (K,): lunch break and closing auction are rows of their own.

    start, end : seconds after local midnight. volume, variance : shares, each adding up to 1.
    """

    start: Index
    end: Index
    auction: NDArray[np.bool_]
    volume: Array
    variance: Array


@dataclass(frozen=True, eq=False)
class _Laid:
    """Bars laid over the intervals of the day.

    edges : (K + 1,) seconds after local midnight. lunch : (K,) which interval is the break.
    day, start, row, volume, opened, closed : (B,) of each bar: session, seconds after
    local midnight, interval (K: the auction), shares, log prices.
    """

    edges: Index
    lunch: NDArray[np.bool_]
    day: Index
    start: Index
    row: Index
    volume: Array
    opened: Array
    closed: Array

    def table(self, values: Array) -> Array:
        """Sums by session and row, the auction last, (D, K + 1)."""
        result = np.zeros((self.day[-1] + 1, len(self.edges)))
        np.add.at(result, (self.day, self.row), values)
        return result


def shape_of(bars: Bars, sessions: Index, hours: Hours) -> Shape:
    """The shape of one symbol's day from the given sessions of it, all of them full."""
    laid = _lay(bars, sessions, hours)
    length = np.diff(laid.edges).astype(np.float64)
    traded = laid.table(laid.volume)
    total = traded.sum(axis=1, keepdims=True)
    shares = trimmed_mean(traded / np.where(total > 0.0, total, 1.0))
    volume = _drawn(shares[:-1], np.where(laid.lunch, 0.0, length), len(sessions))
    even = np.where(laid.lunch, CLOSED_RATE * length, length)
    variance = _drawn(trimmed_mean(_squares(laid)), even, len(sessions))
    start, end = laid.edges[:-1], laid.edges[1:]
    if shares[-1] <= 0.0:
        return Shape(start, end, np.zeros(len(start), np.bool_), volume, variance)
    auction = shares[-1] / shares.sum()
    return Shape(
        start=np.append(start, hours.close),
        end=np.append(end, _auction_time(laid)),
        auction=np.append(np.zeros(len(start), np.bool_), True),
        volume=np.append((1.0 - auction) * volume, auction),
        variance=np.append(variance, 0.0),
    )


def _lay(bars: Bars, sessions: Index, hours: Hours) -> _Laid:
    keep = np.isin(bars.session, sessions)
    start = hours.open + bars.after_open[keep]
    edges = _edges(int(start[0]), bars.step, hours)
    lunch = edges[:-1] == (hours.lunch[0] if hours.lunch else hours.close)
    return _Laid(
        edges=edges,
        lunch=lunch,
        day=np.searchsorted(sessions, bars.session[keep]),
        start=start,
        row=_rows(start, start + bars.step, edges, lunch),
        volume=bars.volume[keep],
        opened=np.log(bars.open[keep]),
        closed=np.log(bars.close[keep]),
    )


def _edges(start: int, step: int, hours: Hours) -> Index:
    """Edges of the intervals from open to close: whole bars each, cut at the lunch break."""
    width = step * -(-SHORTEST // step)
    regular = np.arange(hours.open - (hours.open - start) % step, hours.close, width)
    lunch = hours.lunch or (hours.close, hours.close)
    inside = (regular > hours.open) & ~((regular > lunch[0]) & (regular < lunch[1]))
    edges: Index = np.unique([hours.open, *regular[inside], *lunch, hours.close])
    return edges


def _rows(start: Index, end: Index, edges: Index, lunch: NDArray[np.bool_]) -> Index:
    """The interval of each bar; one past the last is the auction.

    A bar that is under way at the open, or at the end of lunch, belongs to what follows; one
    within the break to what came before.
    """
    row: Index = np.searchsorted(edges, np.maximum(start, edges[0]), side="right") - 1
    for at in np.flatnonzero(lunch):
        row[row == at] = at - 1
        row[(start < edges[at + 1]) & (end > edges[at + 1])] = at + 1
    return row


def _squares(laid: _Laid) -> Array:
    """Squared log returns by session and interval; what came with the night is left out."""
    before = np.append(laid.opened[:1], laid.closed[:-1])
    first = np.diff(laid.day, prepend=-1) > 0
    before[first] = laid.opened[first]
    over_lunch = np.zeros_like(before)
    for at in np.flatnonzero(laid.lunch):
        crossed = ~first & (laid.row > at) & (np.append(0, laid.row[:-1]) < at)
        over_lunch[crossed] = (laid.opened - before)[crossed] ** 2
        before[crossed] = laid.opened[crossed]
    result = laid.table((laid.closed - before) ** 2)[:, :-1]
    result[:, laid.lunch] = laid.table(over_lunch).sum(axis=1, keepdims=True)
    return result


def _drawn(mean: Array, even: Array, sessions: int) -> Array:
    """Shares of a mean curve, drawn towards an even one that weighs as much as one session."""
    even, total = even / even.sum(), mean.sum()
    return even if total == 0.0 else (sessions * mean / total + even) / (sessions + 1)


def _auction_time(laid: _Laid) -> int:
    """When most of the volume after the close prints."""
    after = laid.row == len(laid.lunch)
    times, which = np.unique(laid.start[after], return_inverse=True)
    return int(times[np.argmax(np.bincount(which, weights=laid.volume[after]))])
