"""Every chart of a list with its values, by name, in the order of the page."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from scheduler.report.chart import Chart
from scheduler.report.list_charts import (
    LEFT,
    LIST_COST,
    RISK,
    RISK_UNTIED,
    SIDES,
    corridor,
    currencies,
    exposures,
)
from scheduler.report.list_lines import ListLines, corridor_words
from scheduler.report.palette import SERIES


class Drawn(NamedTuple):
    """A chart and what its `@name`s stand for beside the axis's; None: nothing to draw."""

    chart: Chart
    values: dict[str, Any] | None


def drawn(lines: ListLines) -> dict[str, Drawn]:
    """The charts of a list; corridors by how little room they leave, the least first."""
    found = {"sides": Drawn(SIDES, lines.sides()), "left": Drawn(LEFT, lines.left())}
    count = len(lines.currency_groups)
    if count > 1:
        found["currencies"] = Drawn(currencies(count), lines.currencies())
    for measure in measures(lines):
        found[f"corridor:{measure}"] = Drawn(
            corridor(corridor_words(measure)), lines.corridor(measure)
        )
    if lines.factors:
        count = min(len(lines.factors), len(SERIES))
        found["exposures"] = Drawn(exposures(count), lines.exposures())
    certain = lines.plan.summary["total"]["cost_std"] == 0.0
    tied = lines.transition.risk is not None
    found["risk"] = Drawn(RISK if tied else RISK_UNTIED, None if certain else lines.risk())
    found["list_distribution"] = Drawn(LIST_COST, lines.cost())
    return found


def measures(lines: ListLines) -> list[str]:
    """What corridors are on, by how little room they leave at any time, the least first."""
    return sorted(dict.fromkeys(lines.transition.measures), key=lambda m: _room(lines, m))


def _room(lines: ListLines, measure: str) -> float:
    level, (lower, upper) = lines.column(measure), lines.bounds(measure)
    rooms = np.concatenate((level - lower, upper - level))
    rooms = rooms[np.isfinite(rooms)]
    return float(rooms.min()) if len(rooms) else np.inf
