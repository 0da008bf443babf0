"""Ticks of a clock axis: round clock times, and the date at the start of each session."""

from __future__ import annotations

from datetime import datetime, timedelta

import numpy as np

from scheduler.report.clock_axis import ClockAxis, clock_text, date_text
from scheduler.sessions import Kind

_STEPS = (1, 2, 5, 10, 15, 30, 60, 120, 180, 240, 360, 720)  # minutes from tick to tick
_MOST = 9
_MINUTE = timedelta(minutes=1)


def ticks(axis: ClockAxis) -> tuple[list[float], list[str]]:
    """Positions and texts; of many sessions only every second, third... start is marked."""
    trading = np.flatnonzero(axis.grid.open)
    opens = trading[np.diff(axis.grid.session[trading], prepend=-1) != 0].tolist()
    if len(opens) == 1:
        marks = _round_times(axis, _MOST) or {0.0: clock_text(axis.starts(0))}
    else:
        opens = opens[:: -(-len(opens) // _MOST)]
        marks = {
            float(axis.left[stage]): f"{clock_text(start)}<br>{date_text(start)}"
            for stage in opens
            for start in [axis.starts(stage)]
        }
        room = axis.length / _MOST
        between = _round_times(axis, _MOST - len(opens))
        marks |= {x: text for x, text in between.items() if min(abs(x - m) for m in marks) >= room}
    return list(marks), list(marks.values())


def _round_times(axis: ClockAxis, most: int) -> dict[float, str]:
    """Positions of clock times at the finest round step that makes no more than `most`."""
    continuous = np.flatnonzero(axis.grid.kind == Kind.CONTINUOUS).tolist()
    for step in (step for step in _STEPS if axis.length <= step * _MOST):
        found: dict[datetime, float] = {}
        for stage in continuous:
            for moment in _multiples(axis.starts(stage), axis.ends(stage), step):
                found.setdefault(moment, _position(axis, stage, moment))
        if len(found) <= most:
            return {x: clock_text(moment) for moment, x in found.items()}
    return {}


def _multiples(start: datetime, end: datetime, step: int) -> list[datetime]:
    """Times of day from start to end that are whole multiples of a step."""
    midnight = start.replace(hour=0, minute=0, second=0, microsecond=0)
    first, last = ((moment - midnight) / _MINUTE / step for moment in (start, end))
    return [midnight + i * step * _MINUTE for i in range(-int(-first // 1), int(last // 1) + 1)]


def _position(axis: ClockAxis, stage: int, moment: datetime) -> float:
    start, end = axis.starts(stage), axis.ends(stage)
    passed = (moment - start) / (end - start)
    return float(axis.left[stage] + passed * (axis.right[stage] - axis.left[stage]))
