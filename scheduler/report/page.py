"""The report: one page that holds everything and asks the network for nothing."""

from __future__ import annotations

from html import escape
from typing import Any

import numpy as np

from scheduler.model.ragged import Index
from scheduler.plan import Plan
from scheduler.report.chart import chart_box, rounded
from scheduler.report.charts import CHARTS
from scheduler.report.clock_axis import ClockAxis
from scheduler.report.density import density
from scheduler.report.details import order_cards, order_tiles
from scheduler.report.figures import CERTAIN
from scheduler.report.frame import framed, page_part
from scheduler.report.frontier import LEFT_OUT, SHARED, frontiers, shares_state
from scheduler.report.lines import Lines, axis_data
from scheduler.report.list_lines import ListLines
from scheduler.report.list_parts import parts_of
from scheduler.report.list_section import ListSection
from scheduler.report.orders_table import COLUMNS, orders_table
from scheduler.report.overview import (
    aim_text,
    notes_block,
    notes_by_order,
    order_text,
    total_tiles,
)

_LAWS_DRAWN = 12  # orders whose distribution and frontier are worked out
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
    general, special = notes_by_order(plan)
    parts = parts_of(plan)
    whole = None if parts is None else ListSection(ListLines(plan), parts)
    names = [order_text(name, row) for name, row in plan.summary["orders"].items()]
    several = len(names) > 1
    table = page_part(
        "plan_orders.html",
        several="" if several else "hidden",
        table=orders_table(plan, special, parts) if several else "",
        columns=escape(COLUMNS if whole else ""),
    )
    above = [_totals(plan, whole), notes_block(general), whole.html() if whole else "", table]
    charts = "".join(_order_box(name, whole is not None) for name in CHARTS)
    return framed(
        plan,
        _data(plan, special, whole),
        heading="Trading plan",
        title="Plan",
        asked=aim_text(plan),
        above=above,
        names=names,
        inside=page_part("plan_order.html", charts=charts),
        script="plan.js",
    )


def _totals(plan: Plan, whole: ListSection | None) -> str:
    if whole is not None:
        return whole.tiles()
    return total_tiles(plan) if len(plan.book.names) > 1 else ""


def _order_box(name: str, together: bool) -> str:
    chart = CHARTS[name]
    if together and name == "frontier":
        why = f'<p class="left-out">{escape(LEFT_OUT)}</p>'
        return f"<figure><h3>{escape(chart.question)}</h3>{why}</figure>"
    return chart_box(chart, f'data-chart="{name}"')


def _data(plan: Plan, notes: dict[str, list[str]], whole: ListSection | None) -> dict[str, Any]:
    """What the page draws from: the charts' descriptions, the axes, and every order's values."""
    lines, ranked = Lines(plan), _by_weight(plan, whole)
    laws = _laws(plan, ranked[:_LAWS_DRAWN], whole is not None)
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
        part = None if whole is None else (whole.parts.cost[order], whole.parts.risk[order])
        orders.append(
            {
                "title": order_text(name, row),
                "axis": list(axes).index(id(grid)),
                "values": rounded({**lines.of(order, axis), **columns, **laws.get(order, {})}),
                "lawsDrawn": order in laws,
                "missing": {"frontier": SHARED} if shares_state(plan, order) else {},
                "tiles": order_tiles(row, slices, part),
                "cards": order_cards(row, notes.get(name, []), together=whole is not None),
            }
        )
    return {
        "charts": {name: {"traces": c.traces, "layout": c.layout} for name, c in CHARTS.items()},
        "axes": [rounded(axis_data(axis)) for axis in axes.values()],
        "orders": orders,
        "first": int(ranked[0]) if whole else min(laws),
        "certain": CERTAIN,
        "lawsDrawn": _LAWS_DRAWN,
        "list": None if whole is None else whole.data(),
    }


def _by_weight(plan: Plan, whole: ListSection | None) -> Index:
    """Orders by value; of a list, by what they cost it."""
    key = plan.figures.notional if whole is None else plan.figures.expected_cost
    return np.argsort(-key, kind="stable")


def _laws(plan: Plan, orders: Index, together: bool) -> dict[int, dict[str, Any]]:
    """Distributions of some orders and, if they were planned alone, frontiers."""
    curves = [None] * len(orders) if together else frontiers(plan, orders)
    return {
        order: {**(density(plan.figures, order) or {}), **(frontier or {})}
        for order, frontier in zip(orders.tolist(), curves, strict=True)
    }
