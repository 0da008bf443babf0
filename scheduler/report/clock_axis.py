"""A time axis without closed periods: trading minutes laid end to end, with a gap for each pause.

Continuous buckets are as wide as they last, auctions as wide as a usual bucket; a night or a
lunch is a narrow gap. Positions are plain numbers; texts carry the clock.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Any

import numpy as np

from scheduler.model.ragged import Array
from scheduler.sessions import Grid, Kind


@dataclass(frozen=True)
class ClockAxis:
    """Positions of M stages: from `left` to `right`, (M,), one after the other."""

    grid: Grid
    left: Array
    right: Array

    @classmethod
    def of(cls, grid: Grid) -> ClockAxis:
        minutes = (grid.end - grid.start).astype("timedelta64[ns]").astype(float) / 6e10
        continuous, closed = grid.kind == Kind.CONTINUOUS, grid.kind == Kind.CLOSED
        usual = float(np.median(minutes[continuous])) if continuous.any() else 1.0
        trading = minutes[continuous].sum() + usual * grid.auction.sum()
        gap = max(usual, min(0.015, 0.2 / max(closed.sum(), 1)) * trading)
        width = np.where(grid.auction, usual, np.where(closed, gap, minutes))
        right = np.cumsum(width)
        return cls(grid, right - width, right)

    @property
    def length(self) -> float:
        return float(self.right[-1])

    def starts(self, stage: int) -> datetime:
        """Local time a stage starts at."""
        return datetime.fromisoformat(self.grid.local_start[stage])

    def ends(self, stage: int) -> datetime:
        """Local time a stage ends at."""
        return datetime.fromisoformat(self.grid.local_end[stage])

    def path(self, initial: Any, after: list[Any]) -> list[Any]:
        """A value at time zero and after each stage as points of a line, broken at pauses."""
        points = [initial]
        for value, trading in zip(after, self.grid.open.tolist(), strict=True):
            points += [value] if trading else [None, value]
        return points

    def spans(self) -> list[str]:
        """Each bucket that trades in words: `Thu 5 Mar 10:00–10:15`."""
        spans = []
        for stage in np.flatnonzero(self.grid.open).tolist():
            start, end = self.starts(stage), self.ends(stage)
            text = f"{date_text(start)} {clock_text(start)}"
            if end != start:
                text += f"–{clock_text(end)}"
            spans.append(f"{text} auction" if self.grid.auction[stage] else text)
        return spans

    def path_times(self) -> list[str | None]:
        """The time of each point of a `path` in words."""
        texts = []
        for stage, auction in enumerate(self.grid.auction.tolist()):
            end = self.ends(stage)
            text = f"{date_text(end)} {clock_text(end)}"
            texts.append(f"{text} after the auction" if auction else text)
        start = self.starts(0)
        return self.path(f"{date_text(start)} {clock_text(start)}", texts)


def outline(upper: list[Any], lower: list[Any]) -> list[Any]:
    """There along one line and back along another, piece by piece of a broken pair of lines."""
    points: list[Any] = []
    start = 0
    for stop in [*(i for i, value in enumerate(upper) if value is None), len(upper)]:
        points += [*upper[start:stop], *reversed(lower[start:stop]), None]
        start = stop + 1
    return points[:-1]


def date_text(moment: datetime) -> str:
    """`Thu 5 Mar`."""
    return f"{moment:%a} {moment.day} {moment:%b}"


def clock_text(moment: datetime) -> str:
    """`10:15`, with seconds only where there are any."""
    return f"{moment:%H:%M:%S}" if moment.second else f"{moment:%H:%M}"
