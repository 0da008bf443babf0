"""The volume so far, held against its forecast, and what it says of the volume to come.

With log volume varying by s from session to session and by b from bucket to bucket around it, the
ratio R of n buckets' volume to its forecast says of the rest that it runs at R^w of the forecast,

    w = s^2 / (s^2 + b^2/n),

the normal posterior mean of the session's part of log R.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import date

import numpy as np
import pandas as pd

from scheduler.intake.clocks import Clocks
from scheduler.paths import BUCKET_NOISE, SESSION_NOISE
from scheduler.rest.fills import Fills
from scheduler.sessions import Grid, Kind, resolve, volume_between
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs

_LEAST = 0.1  # a ratio below is taken for this: bars that are missing, not a market that stopped


@dataclass(frozen=True)
class Volume:
    """By symbol: the volume so far over its forecast, and what to multiply the rest's by."""

    came: dict[str, float]
    ahead: dict[str, float]
    notes: tuple[str, ...]


def in_volume(inputs: Inputs, ahead: Mapping[str, float]) -> Inputs:
    """The tables with the expected volume of symbols multiplied."""
    if not ahead:
        return inputs
    frame = inputs.market.frame
    factor = frame["symbol"].map(dict(ahead)).fillna(1.0)
    market = replace(inputs.market, frame=frame.assign(adv=frame["adv"] * factor))
    return replace(inputs, market=market)


def volume_so_far(
    bars: Checked,
    rows: pd.DataFrame,
    clocks: Clocks,
    fills: Fills,
    grids: Mapping[str, Grid],
    *,
    day: date,
    at: pd.Timestamp,
) -> Volume:
    """Volume of bars since each symbol's time zero, over what was expected of the others by then.

    rows : orders with their market row, in the order of the clocks'. Own fills are taken off.
    """
    came: dict[str, float] = {}
    ahead: dict[str, float] = {}
    notes: list[str] = []
    adv = rows["adv"].to_numpy(dtype=float)
    for order, (symbol, calendar) in enumerate(zip(clocks.symbol, clocks.calendar, strict=True)):
        if symbol in came or symbol not in grids:
            continue
        mine = bars.frame[bars.frame["symbol"] == symbol]
        begin = np.array(
            [resolve(text, date=day, calendar=calendar).value for text in mine["time"]],
            dtype=np.int64,
        )
        zero = pd.Timestamp(grids[symbol].time_zero, tz="UTC")
        span = _covered(begin, zero.value, at.value)
        if span is None:
            notes.append(f"{symbol}: bars say nothing of the volume since {zero.isoformat()}")
            continue
        inside, start, end = span
        between = (pd.Timestamp(moment, tz="UTC") for moment in (start, end))
        expected, _ = volume_between(calendar, clocks.profiles[order], *between)
        expected *= adv[order]
        if expected <= 0.0:
            continue
        frame = fills.frame[fills.frame["symbol"] == symbol]
        own = frame.loc[(frame["instant"] >= start) & (frame["instant"] < end), "quantity"].sum()
        ratio = (float(mine["volume"].to_numpy()[inside].sum()) - float(own)) / expected
        came[symbol] = max(ratio, _LEAST)
        buckets = _buckets(grids[symbol], end)
        weight = SESSION_NOISE**2 / (SESSION_NOISE**2 + BUCKET_NOISE**2 / buckets)
        ahead[symbol] = came[symbol] ** weight
        notes.append(
            f"{symbol}: {ratio:.0%} of the expected volume has come; {ahead[symbol]:.0%} of it is "
            "expected from now on"
        )
    return Volume(came, ahead, tuple(notes))


def _covered(
    begin: np.ndarray[tuple[int], np.dtype[np.int64]], zero: int, at: int
) -> tuple[np.ndarray[tuple[int], np.dtype[np.bool_]], int, int] | None:
    """Bars wholly between time zero and the present, and the time they cover; None without any."""
    if len(begin) < 2:
        return None
    step = int(np.diff(np.sort(begin)).min())
    inside = (begin >= zero) & (begin + step <= at)
    if not inside.any():
        return None
    return inside, int(begin[inside].min()), int(begin[inside].max()) + step


def _buckets(grid: Grid, end: int) -> int:
    """Buckets of the plan that were over by `end`, at least 1."""
    ended = (grid.kind != Kind.CLOSED) & (grid.end.astype(np.int64) <= end)
    return max(1, int(ended.sum()))
