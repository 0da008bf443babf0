"""Bars placed in sessions: which bar belongs to which session, and where in it.

A bar's time is its start. Without offset it is local exchange time, with one it is converted.
A symbol with one bar on most of its dates has daily bars: a bar at midnight belongs to the date as
written, whatever its offset. With more, the bars are intraday: one belongs to the session whose
hours it overlaps, or, where it starts within `AUCTION_WAIT` after the close, to that session's
closing auction. All other bars (before the open, later, on other days) are left out.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InputError
from scheduler.sessions.calendar import SECOND, Calendar
from scheduler.tables.draft import Checked

AUCTION_WAIT = 15 * 60
"""Seconds after the close in which the closing auction may print (our choice)."""

_DATE = len("2026-01-05")
_LOCAL = len("2026-01-05T00:00:00")
_COLUMNS = ("open", "high", "low", "close", "volume")
_OFFSET = r"[+-]\d\d:\d\d(?::\d\d)?$"


@dataclass(frozen=True, eq=False)
class Bars:
    """One symbol's bars in time order.

    session : (B,) index in the calendar. after_open : (B,) seconds from the session's open to
    the bar's start; without meaning for daily bars. step : seconds of a bar; 0: daily bars.
    open, high, low, close, volume : (B,).
    """

    symbol: str
    step: int
    session: NDArray[np.int64]
    after_open: NDArray[np.int64]
    open: NDArray[np.float64]
    high: NDArray[np.float64]
    low: NDArray[np.float64]
    close: NDArray[np.float64]
    volume: NDArray[np.float64]

    def last(self, sessions: int) -> Bars:
        """The bars of as many sessions of the calendar, the last being that of the last bar."""
        keep = self.session > self.session.max(initial=0) - sessions
        columns = {
            name: value[keep] for name, value in vars(self).items() if isinstance(value, np.ndarray)
        }
        return replace(self, **columns)


def place(checked: Checked, known: Calendar) -> tuple[list[Bars], tuple[str, ...]]:
    """The bars of each symbol, symbols as they first come; and what was left out.

    A symbol all of whose bars are left out comes with none.

    Raises:
        InputError: a local time that the change of the clocks skips or repeats; two bars of one
            time.
    """
    frame = checked.frame
    symbol, names = pd.factorize(frame["symbol"])
    daily, known_years = _daily(frame), frame["time"].str[:4].between("1700", "2200").to_numpy()
    fine, coarse = ~daily & known_years, daily & known_years
    instant, session = np.zeros(len(frame), np.int64), np.full(len(frame), -1, np.int64)
    instant[fine] = instants(checked, fine, known)
    step = _steps(symbol, instant, fine, len(names))
    ends = instant[fine] + step[symbol[fine]] * SECOND
    session[fine] = sessions_of_instants(instant[fine], ends, known)
    session[coarse] = _sessions_of_dates(_dates(frame["time"][coarse], known), known)
    _check_unique(checked, pd.DataFrame({"symbol": symbol, "at": instant, "session": session}))
    order = np.lexsort((instant, session, symbol))
    order = order[session[order] >= 0]
    last = np.cumsum(np.bincount(symbol[order], minlength=len(names)))
    after = (instant - known.opens[session]) // SECOND
    columns = [frame[column].to_numpy() for column in _COLUMNS]
    found = [
        Bars(name, int(length), session[at], after[at], *(column[at] for column in columns))
        for name, length, at in zip(names, step, np.split(order, last[:-1]), strict=True)
    ]
    return found, _left_out(checked, session, known)


def _daily(frame: pd.DataFrame) -> NDArray[np.bool_]:
    """Which rows are of symbols with daily bars."""
    bars = frame.groupby(["symbol", frame["time"].str[:_DATE]], sort=False).size()
    several = (bars > 1).groupby(level="symbol", sort=False).mean()
    return (frame["symbol"].map(several) <= 0.5).to_numpy()


def _steps(
    symbol: NDArray[np.int64], instant: NDArray[np.int64], fine: NDArray[np.bool_], count: int
) -> NDArray[np.int64]:
    """Each symbol's commonest distance from one bar to the next, seconds; 0: daily bars."""
    result = np.zeros(count, np.int64)
    order = np.lexsort((instant, symbol))
    order = order[fine[order]]
    for at in np.split(order, np.flatnonzero(np.diff(symbol[order])) + 1):
        distance, times = np.unique(np.diff(instant[at]) // SECOND, return_counts=True)
        if len(times):
            result[symbol[at[0]]] = max(int(distance[np.argmax(times)]), 1)
    return result


def _check_unique(checked: Checked, key: pd.DataFrame) -> None:
    again = (key.duplicated() & (key["session"] >= 0)).to_numpy()
    if again.any():
        rule = "is the same time, or the same session of daily bars, as an earlier row"
        raise InputError(checked.problems(again, "time", rule, "keep one of the two"))


def instants(checked: Checked, which: NDArray[np.bool_], known: Calendar) -> NDArray[np.int64]:
    """Nanoseconds since the epoch, UTC, of the times of a mask of a table's rows.

    Raises:
        InputError: a local time that the change of the clocks skips or repeats.
    """
    text = checked.frame["time"][which]
    zoned = text.str.contains(_OFFSET).to_numpy(dtype=np.bool_)
    result = np.empty(len(text), np.int64)
    moments = pd.to_datetime(text[zoned], format="ISO8601", utc=True)
    result[zoned] = moments.dt.as_unit("ns").astype(np.int64)
    local = pd.to_datetime(text[~zoned], format="ISO8601")
    local = local.dt.tz_localize(known.zone, ambiguous="NaT", nonexistent="NaT")
    unclear = np.zeros(len(checked.frame), np.bool_)
    unclear[local.index[local.isna()]] = True
    if unclear.any():
        rule = f"comes twice or never in {known.timezone}, where the clocks change"
        remedy = "give the times with their offsets, as in 2026-01-05T10:00:00-05:00"
        raise InputError(checked.problems(unclear, "time", rule, remedy))
    result[~zoned] = local.dt.tz_convert("UTC").dt.as_unit("ns").astype(np.int64)
    return result


def _dates(text: pd.Series[str], known: Calendar) -> NDArray[np.datetime64]:
    """The dates of daily bars."""
    zoned = text.str.contains(_OFFSET) & (text.str[_DATE:_LOCAL] != "T00:00:00")
    date = text.str[:_DATE].to_numpy(dtype="datetime64[D]")
    moments = pd.to_datetime(text[zoned], format="ISO8601", utc=True)
    local = moments.dt.tz_convert(known.zone).dt.tz_localize(None)
    date[zoned.to_numpy(dtype=np.bool_)] = local.to_numpy().astype("datetime64[D]")
    return date


def _sessions_of_dates(date: NDArray[np.datetime64], known: Calendar) -> NDArray[np.int64]:
    at = np.searchsorted(known.dates, date)
    there = known.dates[np.minimum(at, len(known.dates) - 1)] == date
    return np.where(there, at, -1)


def sessions_of_instants(
    instant: NDArray[np.int64], end: NDArray[np.int64], known: Calendar
) -> NDArray[np.int64]:
    """The session that [instant, end) overlaps or whose closing auction it may be; -1 for none."""
    closed = np.append(known.opens[1:] - known.closes[:-1], 0)
    wait = np.minimum(closed, AUCTION_WAIT * SECOND)
    at = np.searchsorted(known.closes + wait, instant, side="right")
    at = np.minimum(at, len(known.closes) - 1)
    inside = (end > known.opens[at]) & (instant < (known.closes + wait)[at])
    return np.where(inside, at, -1)


def _left_out(checked: Checked, session: NDArray[np.int64], known: Calendar) -> tuple[str, ...]:
    outside = np.flatnonzero(session < 0)
    if not len(outside):
        return ()
    first = checked.frame.iloc[outside[0]]
    return (
        f"{len(outside)} of {len(session)} bars are outside the sessions of {known.code} and left "
        f"out; the first, in row {checked.rows[outside[0]]}, is {first['symbol']} at "
        f"{first['time']}",
    )
