"""The report: one page that holds everything and asks the network for nothing."""

from __future__ import annotations

import base64
import gzip
import json
from html import escape
from importlib.resources import files
from string import Template
from typing import Any

import numpy as np

from scheduler.plan import Plan
from scheduler.report.charts import CHARTS
from scheduler.report.clock_axis import ClockAxis
from scheduler.report.density import density
from scheduler.report.details import order_cards, order_tiles
from scheduler.report.figures import need_plotly
from scheduler.report.frontier import frontiers
from scheduler.report.lines import Lines, axis_data
from scheduler.report.overview import (
    aim_text,
    notes_block,
    notes_by_order,
    order_text,
    orders_table,
    picker,
    session_text,
    settings_block,
    total_tiles,
)

_LAWS_DRAWN = 12  # orders whose distribution and frontier are worked out
_DIGITS = 6  # of what is drawn; share counts are kept whole
_EXACT = frozenset({"shares", "remaining"})
_SLICE_COLUMNS = {
    "remaining": "remaining",
    "imbalance_end": "imbalance",
    "moved_end": "displacement_bps",
    "slice_cost": "expected_cost",
    "std_ahead": "cost_std_remaining",
}
"""What the table of slices shows beside the drawn values, and its column in the schedule."""


def page(plan: Plan) -> str:
    """A self-contained HTML page of a plan.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    script = need_plotly("offline").get_plotlyjs()
    general, special = notes_by_order(plan)
    several = len(plan.book.names) > 1
    return Template(_file("page.html")).substitute(
        title=escape(f"Plan {plan.summary['date']}"),
        style=_file("page.css"),
        session=escape(session_text(plan)),
        aim=escape(aim_text(plan)),
        caution=escape(plan.summary["caution"]),
        totals=total_tiles(plan) if several else "",
        orders=orders_table(plan, special) if several else "",
        several="" if several else "hidden",
        picker=picker(plan),
        notes=notes_block(general),
        settings=settings_block(plan),
        charts="".join(_chart_box(name) for name in CHARTS),
        data=_packed(json.dumps(_data(plan, special), separators=(",", ":"), allow_nan=False)),
        plotly=_packed(script),
        script=_file("page.js"),
    )


def _file(name: str) -> str:
    return (files("scheduler.report") / name).read_text(encoding="utf-8")


def _packed(text: str) -> str:
    """Text as base64 of its gzip, for the page to unpack; the same text gives the same bytes."""
    return base64.b64encode(gzip.compress(text.encode(), 6, mtime=0)).decode()


def _chart_box(name: str) -> str:
    chart = CHARTS[name]
    return (
        f'<figure><h3>{escape(chart.question)}</h3><div class="chart" data-chart="{name}"></div>'
        f"<figcaption>{escape(chart.reading)}</figcaption></figure>"
    )


def _data(plan: Plan, notes: dict[str, list[str]]) -> dict[str, Any]:
    """What the page draws from: the charts' descriptions, the axes, and every order's values."""
    lines, laws = Lines(plan), _laws(plan)
    axes: dict[int, ClockAxis] = {}
    orders = []
    schedule = {str(name): plan.schedule[name].to_numpy() for name in plan.schedule}
    stop = 0
    for order, (name, row) in enumerate(plan.summary["orders"].items()):
        grid = plan.book.grids[order]
        axis = axes.setdefault(id(grid), ClockAxis.of(grid))
        start, stop = stop, stop + int(grid.open.sum())
        slices = {name: column[start:stop] for name, column in schedule.items()}
        columns = {name: slices[column].tolist() for name, column in _SLICE_COLUMNS.items()}
        orders.append(
            {
                "title": order_text(name, row),
                "axis": list(axes).index(id(grid)),
                "values": rounded({**lines.of(order, axis), **columns, **laws.get(order, {})}),
                "lawsDrawn": order in laws,
                "tiles": order_tiles(row, slices),
                "cards": order_cards(row, notes.get(name, [])),
            }
        )
    return {
        "charts": {name: {"traces": c.traces, "layout": c.layout} for name, c in CHARTS.items()},
        "axes": [rounded(axis_data(axis)) for axis in axes.values()],
        "orders": orders,
        "lawsDrawn": _LAWS_DRAWN,
    }


def _laws(plan: Plan) -> dict[int, dict[str, Any]]:
    """Distribution and frontier of the largest orders."""
    largest = np.argsort(-plan.figures.notional, kind="stable")[:_LAWS_DRAWN]
    return {
        order: {**(density(plan.figures, order) or {}), **(frontier or {})}
        for order, frontier in zip(largest.tolist(), frontiers(plan, largest), strict=True)
    }


def rounded(values: dict[str, Any]) -> dict[str, Any]:
    """Values with the digits that a screen can show; share counts as they are."""
    return {key: value if key in _EXACT else _rounded(value) for key, value in values.items()}


def _rounded(value: Any) -> Any:
    if isinstance(value, float):
        short = float(f"{value:.{_DIGITS}g}")
        return int(short) if short.is_integer() else short
    return [_rounded(item) for item in value] if isinstance(value, list) else value
