"""The clock of a list as an axis: pauses are the times at which no exchange is open."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.report.clock_axis import ClockAxis
from scheduler.sessions import Grid, Kind
from scheduler.transition import Transition


def list_axis(transition: Transition) -> ClockAxis:
    """Positions of the clock's intervals, in the time zone of the first order."""
    clock, grids = transition.clock, transition.book.grids
    zone = grids[0].timezone
    days = pd.to_datetime(clock.end, utc=True).tz_convert(zone).strftime("%Y-%m-%d")
    nothing = np.zeros(len(clock.end))
    start, end = (edge.astype("datetime64[ns]") for edge in (clock.start, clock.end))
    return ClockAxis.of(
        Grid(
            kind=_kinds(transition),
            start=start,
            end=end,
            volume=nothing,
            variance=nothing,
            session=np.unique(days, return_inverse=True)[1],
            overnight=np.zeros(len(nothing), dtype=np.bool_),
            timezone=zone,
            time_zero=start[0],
        )
    )


def _kinds(transition: Transition) -> NDArray[np.int8]:
    """Instants are auctions; closed is what no open stage of any order covers."""
    clock = transition.clock
    grids = {id(grid): grid for grid in transition.book.grids}.values()
    opens = np.concatenate([grid.start[grid.open].astype(np.int64) for grid in grids])
    closes = np.concatenate([grid.end[grid.open].astype(np.int64) for grid in grids])
    order = np.argsort(opens, kind="stable")
    # The latest end among the open stages that start no later than an interval does.
    begun = np.searchsorted(opens[order], clock.start, side="right") - 1
    until = np.maximum.accumulate(closes[order])[np.maximum(begun, 0)]
    covered = (begun >= 0) & (until >= clock.end)
    kinds = np.where(covered, Kind.CONTINUOUS, Kind.CLOSED)
    return np.where(clock.start == clock.end, Kind.AUCTION, kinds).astype(np.int8)
