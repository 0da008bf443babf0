"""One clock grid for names on different exchanges: the union of their stages' edges.

Every interval of the clock lies within one stage of each name, before its first, or after its
last. An auction that is an instant gets an interval of no length, so that what it trades shows at
its end.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scheduler.coupling import AFTER, BEFORE
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem
from scheduler.sessions import Grid


@dataclass(frozen=True)
class Clock:
    """T intervals and where each of N names is in them.

    start, end : (T,) ns since the epoch. bucket, begin, done : (N, T), as in `Coupling` (`done` is
    its `end`). weight : (N, T) square root of the variance share. session : (T,) the latest of
    the names' sessions, from 0.
    """

    start: NDArray[np.int64]
    end: NDArray[np.int64]
    bucket: Index
    begin: Array
    done: Array
    weight: Array
    session: Index


def common_clock(grids: tuple[Grid, ...], problem: Problem) -> Clock:
    """The clock of a list; `problem` says which stages are free buckets."""
    start, end = _intervals(grids)
    shape = (len(grids), len(start))
    bucket = np.full(shape, AFTER, dtype=np.int64)
    begin, done, variance = np.zeros(shape), np.zeros(shape), np.zeros(shape)
    first, offset = 0, 0
    session = np.zeros(len(start), dtype=np.int64)
    known: dict[tuple[int, bytes], _Place] = {}
    for name, grid in enumerate(grids):
        stages = slice(first, first + len(grid))
        free = np.zeros(len(grid), dtype=np.bool_)
        count = int(problem.layout.size[name])
        free[problem.bucket[offset : offset + count] - first] = True
        key = (id(grid), free.tobytes())
        if key not in known:
            known[key] = _place(grid, free, start, end)
        place = known[key]
        begin[name], done[name], variance[name] = place.begin, place.done, place.variance
        bucket[name] = np.where(place.bucket >= 0, place.bucket + offset, place.bucket)
        session = np.maximum(session, place.session)
        first, offset = stages.stop, offset + count
    return Clock(start, end, bucket, begin, done, np.sqrt(variance), session)


def _intervals(grids: tuple[Grid, ...]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Starts and ends of all intervals, instants included, in time order."""
    distinct = {id(grid): grid for grid in grids}.values()
    starts = np.concatenate([grid.start.astype(np.int64) for grid in distinct])
    ends = np.concatenate([grid.end.astype(np.int64) for grid in distinct])
    instants = np.unique(starts[starts == ends])
    edges = np.unique(np.concatenate((starts, ends)))
    start = np.concatenate((edges[:-1], instants))
    end = np.concatenate((edges[1:], instants))
    order = np.lexsort((end, start))
    return start[order], end[order]


@dataclass(frozen=True)
class _Place:
    """One grid's intervals, (T,) each: bucket from 0 within the name, or a marker."""

    bucket: Index
    begin: Array
    done: Array
    variance: Array
    session: Index


def _place(
    grid: Grid, free: NDArray[np.bool_], start: NDArray[np.int64], end: NDArray[np.int64]
) -> _Place:
    """Where a name is in every interval of the clock."""
    opens, closes = grid.start.astype(np.int64), grid.end.astype(np.int64)
    stage, in_instant = _stage_at(opens, closes, start, end)
    length = np.maximum(closes - opens, 1)[stage]
    u0 = np.where(in_instant, 0.0, np.clip((start - opens[stage]) / length, 0.0, 1.0))
    u1 = np.where(in_instant, 1.0, np.clip((end - opens[stage]) / length, 0.0, 1.0))
    early = np.logical_not(in_instant) & (start < opens[0])
    late = np.logical_not(in_instant) & (start >= closes[-1])
    variance = np.where(early | late, 0.0, grid.variance[stage] * (u1 - u0))
    leader = (np.cumsum(free) - 1)[stage]  # the free bucket at or before the stage, or -1
    still = np.logical_not(free[stage])  # nothing trades: x stands at its leader's end
    bucket = np.where(late, AFTER, np.where(early | (leader < 0), BEFORE, leader))
    session = np.where(early | late, 0, grid.session[stage])
    return _Place(bucket, np.where(still, 1.0, u0), np.where(still, 1.0, u1), variance, session)


def _stage_at(
    opens: NDArray[np.int64],
    closes: NDArray[np.int64],
    start: NDArray[np.int64],
    end: NDArray[np.int64],
) -> tuple[Index, NDArray[np.bool_]]:
    """The stage of each interval, and whether it is an auction that is an instant."""
    lasting = np.flatnonzero(closes > opens)
    stage = np.zeros(len(start), dtype=np.int64)
    if len(lasting):
        held = np.searchsorted(opens[lasting], start, side="right") - 1
        stage = lasting[np.maximum(held, 0)]
    in_instant = np.zeros(len(start), dtype=np.bool_)
    for instant in np.flatnonzero(closes == opens):
        here = (start == end) & (start == opens[instant])
        stage[here] = instant
        in_instant |= here
    return stage, in_instant
