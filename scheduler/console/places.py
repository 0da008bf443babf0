"""The time axis of the page: one that stays put while starts and ends move.

An order's axis holds the whole of every session that its own window touches; a list's holds the
clock of the list as its tables have it. Plans are placed on it by their instants.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.clock import common_clock
from scheduler.console.desk import Desk
from scheduler.coupling import Coupling
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.problem import assemble
from scheduler.report.clock_axis import ClockAxis, clock_text, date_text
from scheduler.report.lines import axis_data
from scheduler.report.list_axis import list_axis
from scheduler.sessions import Grid, Kind
from scheduler.transition import Transition

_FIXED = ("x_range", "x_title", "tick_x", "tick_text", "pauses")


def fixed_axis(desk: Desk, order: str | None) -> ClockAxis:
    """The axis of an order, or of the whole list; worked out once."""
    if order not in desk.axes:
        book, _ = desk.book(order, {})
        desk.axes[order] = (
            list_axis(untied(book)) if order is None else _whole_sessions(desk, order, book)
        )
    return desk.axes[order]


def _whole_sessions(desk: Desk, order: str, book: Book) -> ClockAxis:
    grid = book.grids[book.names.index(order)]
    first, last = (text[:10] for text in (grid.local_start[0], grid.local_end[-1]))
    wide, _ = desk.book(order, {"start": f"{first}T00:00:00", "end": f"{last}T23:59:59"})
    return ClockAxis.of(wide.grids[wide.names.index(order)])


def untied(book: Book) -> Transition:
    """A book on its common clock, with nothing that ties its orders together."""
    book = book.pooled
    problem = assemble(book.arrays)
    clock = common_clock(book.grids, problem)
    names, times = len(book.names), len(clock.end)
    bounds = np.empty((0, times))
    coupling = Coupling(
        bucket=clock.bucket,
        begin=clock.begin,
        end=clock.done,
        weight=clock.weight,
        loadings=np.empty((names, 0)),
        rows=np.empty((0, names)),
        constant=np.empty(0),
        lower=bounds,
        upper=bounds,
    )
    return Transition(book, None, (), book.arrays, problem, clock, coupling, 1.0, ())


def placed(grid: Grid, axis: ClockAxis) -> ClockAxis:
    """The stages of a grid at the positions that an axis has for their instants."""
    lasting = np.flatnonzero(axis.grid.kind != Kind.AUCTION)
    opens, closes = (_ns(edge[lasting]) for edge in (axis.grid.start, axis.grid.end))
    start, end = _ns(grid.start), _ns(grid.end)
    begins = lasting[np.clip(np.searchsorted(opens, start, "right") - 1, 0, len(lasting) - 1)]
    ends = lasting[np.clip(np.searchsorted(closes, end, "left"), 0, len(lasting) - 1)]
    left, right = _position(axis, begins, start), _position(axis, ends, end)
    known = {(s, e): i for i, (s, e) in enumerate(zip(*_edges(axis.grid), strict=True))}
    for stage in np.flatnonzero(grid.auction).tolist():
        at = known.get((start[stage], end[stage]))
        if at is not None:
            left[stage], right[stage] = axis.left[at], axis.right[at]
    return ClockAxis(grid, left, right)


def _ns(instants: np.ndarray[Any, np.dtype[np.datetime64]]) -> np.ndarray[Any, np.dtype[np.int64]]:
    return instants.astype("datetime64[ns]").astype(np.int64)


def _edges(grid: Grid) -> tuple[list[int], list[int]]:
    return _ns(grid.start).tolist(), _ns(grid.end).tolist()


def _position(axis: ClockAxis, stage: Any, instant: Any) -> Array:
    start, end = _ns(axis.grid.start)[stage], _ns(axis.grid.end)[stage]
    passed = np.clip((instant - start) / np.maximum(end - start, 1), 0.0, 1.0)
    result: Array = axis.left[stage] + passed * (axis.right[stage] - axis.left[stage])
    return result


def axis_values(own: ClockAxis, fixed: ClockAxis) -> dict[str, Any]:
    """What charts over time share: the plan's own positions on the axis that stays put."""
    known = axis_data(fixed)
    path_x = own.path(float(own.left[0]), own.right.tolist())
    return axis_data(own) | {name: known[name] for name in _FIXED} | {"path_x": path_x}


def moments(axis: ClockAxis) -> list[dict[str, str]]:
    """The edges of its buckets: what a start or an end may be moved to, and in words."""
    grid = axis.grid
    stages = np.flatnonzero(grid.open).tolist()
    first, last = axis.starts(stages[0]), axis.ends(stages[-1])
    found = {grid.local_start[i]: axis.starts(i) for i in stages}
    found |= {grid.local_end[i]: axis.ends(i) for i in stages}
    several = first.date() != last.date()
    return [
        {
            "value": text,
            "words": f"{date_text(at)} {clock_text(at)}" if several else clock_text(at),
        }
        for text, at in sorted(found.items(), key=lambda item: item[1])
    ]
