"""The part of the page on a list planned as one: its figures, charts and tables."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

from scheduler.report.chart import chart_box, rounded
from scheduler.report.list_cards import list_cards, list_tiles
from scheduler.report.list_drawn import Drawn, drawn
from scheduler.report.list_lines import ListLines
from scheduler.report.list_parts import Parts

_CORRIDORS_DRAWN = 12


@dataclass(frozen=True)
class ListSection:
    """What the page shows of a list: HTML, and data for its script to draw from."""

    lines: ListLines
    parts: Parts

    @cached_property
    def charts(self) -> dict[str, Drawn]:
        """All charts, but of the corridors only those that leave the least room."""
        every = drawn(self.lines)
        corridors = [name for name in every if name.startswith("corridor:")]
        for name in corridors[_CORRIDORS_DRAWN:]:
            del every[name]
        return every

    def tiles(self) -> str:
        return list_tiles(self.lines, self.parts)

    def html(self) -> str:
        charts = (chart for chart, _ in self.charts.values())
        boxes = "".join(chart_box(chart, f'data-list="{i}"') for i, chart in enumerate(charts))
        cards = list_cards(self.lines, self.parts)
        return f'<div class="charts">{boxes}</div><div class="cards">{cards}</div>'

    def data(self) -> dict[str, Any]:
        return {
            "axis": rounded(self.lines.axis_values),
            "charts": [
                {
                    "traces": chart.traces,
                    "layout": chart.layout,
                    "values": None if values is None else rounded(values),
                }
                for chart, values in self.charts.values()
            ],
        }
