"""A tape: the trades of one symbol placed, signed, and the imbalance along it.

A reading is iota = (B - S) / (2 min(B, S)), B and S the volumes begun by buyers and by sellers. The
window is exponential in traded volume, with the relaxation volume L as its length: the others'
net buying N and all volume T are kept by

    dN = s dq - N dq/L,    dT = dq - T dq/L,    s = +1, -1, 0,

so that a trade counts e^{-v/L} after v more shares have traded. Of the two windows that suggest
themselves it is this one that matches the model: N is the state dE = dq - E dV/L that a reading
starts, while a boxcar keeps a block at full weight for one L and then drops it in one step, and so
reads too high just where the state has faded to 37 %. Unsigned volume is balanced: nothing is
known of it, or it is an auction's. With B - S = N and B + S = T,

    iota = N / (T - |N|),    |iota| <= 5,

and T = L (1 - e^{-V/L}) after V shares of tape. A tape is readable once it has traded L since its
beginning, or since a session that is missing. A closed period relaxes as `overnight_relaxation`
sessions of balanced volume.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InputError, Problem
from scheduler.history.placed import instants, sessions_of_instants
from scheduler.history.signing import Signed, sign_trades
from scheduler.model.ragged import Array, Index, Ragged
from scheduler.sessions.calendar import Calendar
from scheduler.tables.draft import Checked

MOST = 5.0
"""Largest reading, as in the readings table."""


@dataclass(frozen=True, eq=False)
class Tape:
    """The trades of one symbol in time order, all arrays (n,).

    session : index in the calendar. instant : ns since the epoch. auction : trades at the close
    or up to `AUCTION_WAIT` after it. middle : of bid and ask, NaN where they are not known.
    """

    symbol: str
    known: Calendar
    session: Index
    instant: Index
    price: Array
    quantity: Array
    middle: Array
    auction: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.price)

    @cached_property
    def sessions(self) -> Ragged:
        """The trades by session."""
        return Ragged(np.unique(self.session, return_counts=True)[1])

    @cached_property
    def stretches(self) -> Ragged:
        """The trades by stretch of sessions without a missing one."""
        begins = np.flatnonzero(np.diff(self.session) > 1) + 1
        return Ragged(np.diff(np.concatenate(([0], begins, [len(self)]))))

    @cached_property
    def signed(self) -> Signed:
        return sign_trades(self.price, self.middle, self.sessions, self.auction)

    @cached_property
    def value(self) -> Array:
        """The price without bounce between bid and ask, (n,).

        The quote's midpoint, or, where there is none, the mean of the latest price bought at and
        the latest price sold at in the session; the trade's own price until there are both.
        """
        bought, sold = (self._latest(self.signed.sign == side) for side in (1, -1))
        both = 0.5 * (bought + sold)
        seen = np.where(np.isnan(both), self.price, both)
        return np.where(np.isnan(self.middle), seen, self.middle)

    def _latest(self, which: NDArray[np.bool_]) -> Array:
        """The price of the session's latest trade of a mask; NaN before the first."""
        at = np.maximum.accumulate(np.where(which, np.arange(len(self)), -1))
        there = at >= self.sessions.first[self.sessions.owner]
        return np.where(there, self.price[at], np.nan)


@dataclass(frozen=True, eq=False)
class Imbalance:
    """reading : (n,) iota after each trade. clock : (n,) relaxation volumes since the beginning of
    the stretch. readable : (n,) whether that is at least one."""

    reading: Array
    clock: Array

    @property
    def readable(self) -> NDArray[np.bool_]:
        result: NDArray[np.bool_] = self.clock >= 1.0
        return result


def imbalance_along(tape: Tape, relaxation_volume: float, overnight: float = 0.0) -> Imbalance:
    """The reading after each trade.

    relaxation_volume : L, shares. overnight : balanced shares a closed period stands for.
    """
    stretches, own = tape.stretches, tape.quantity / relaxation_volume
    passed = own.copy()
    passed[tape.sessions.first] += overnight / relaxation_volume
    passed[stretches.first] = own[stretches.first]
    none = np.zeros(len(stretches.size))
    net = stretches.scan(np.exp(-passed), -np.expm1(-own) * tape.signed.sign, none)
    clock = _running(passed, stretches)
    total = -np.expm1(-clock)
    balanced = np.maximum(total - np.abs(net), np.abs(net) / MOST)
    reading = np.divide(net, balanced, out=np.zeros_like(net), where=balanced > 0.0)
    return Imbalance(reading, clock)


def _running(values: Array, stretches: Ragged) -> Array:
    """Running totals within each stretch."""
    total = np.cumsum(values)
    before = total[stretches.first] - values[stretches.first]
    result: Array = total - before[stretches.owner]
    return result


def place_trades(
    checked: Checked, calendars: Mapping[str, Calendar]
) -> tuple[list[Tape], tuple[str, ...]]:
    """The tape of each symbol, symbols as they first come; and what was left out.

    calendars : by symbol; a symbol without one is left out, and said.

    Raises:
        InputError: times that go back, or that the change of the clocks skips or repeats.
    """
    frame = checked.frame
    codes, names = pd.factorize(frame["symbol"])
    tapes, notes, problems = [], [], []
    for code, name in enumerate(names):
        mine = codes == code
        if name not in calendars:
            notes.append(f"{name}: has trades, but no row in the market table; left out")
            continue
        known = calendars[name]
        at, rows = instants(checked, mine, known), np.flatnonzero(mine)
        problems += _gone_back(checked, rows[1:][np.diff(at) < 0])
        session = sessions_of_instants(at, at + 1, known)
        outside = rows[session < 0]
        if len(outside):
            notes.append(_left_out(checked, name, outside, len(rows), known))
        keep = session >= 0
        if keep.any():
            tapes.append(_tape(name, known, frame.iloc[rows[keep]], at[keep], session[keep]))
    if problems:
        raise InputError(problems)
    return tapes, tuple(notes)


def _tape(name: str, known: Calendar, frame: pd.DataFrame, at: Index, session: Index) -> Tape:
    return Tape(
        symbol=name,
        known=known,
        session=session,
        instant=at,
        price=frame["price"].to_numpy(dtype=float),
        quantity=frame["quantity"].to_numpy(dtype=float),
        middle=0.5 * (frame["bid"] + frame["ask"]).to_numpy(dtype=float),
        auction=at >= known.closes[session],
    )


def _gone_back(checked: Checked, rows: Index) -> list[Problem]:
    mask = np.zeros(len(checked.frame), np.bool_)
    mask[rows] = True
    rule = "is before the symbol's trade in the row above it"
    return checked.problems(mask, "time", rule, "sort the trades as they came: their order counts")


def _left_out(checked: Checked, name: str, outside: Index, count: int, known: Calendar) -> str:
    first = checked.frame.iloc[outside[0]]
    return (
        f"{name}: {len(outside)} of {count} trades are outside the sessions of {known.code} and "
        f"left out; the first, in row {checked.rows[outside[0]]}, is at {first['time']}"
    )
