"""One chart of one order or of a list, as a plotly figure."""

from __future__ import annotations

from html import escape
from importlib import import_module
from typing import Any

import numpy as np

from scheduler.errors import MissingExtraError, MisuseError
from scheduler.plan import Plan
from scheduler.report.chart import Chart, filled
from scheduler.report.charts import CHARTS
from scheduler.report.density import density
from scheduler.report.frontier import LEFT_OUT, SHARED, frontiers, shares_state
from scheduler.report.lines import Lines, axis_data
from scheduler.report.list_drawn import drawn
from scheduler.report.list_lines import ListLines

CERTAIN = "Nothing is at risk: the cost is certain."
_LISTED = 20


def figure(plan: Plan, name: str, order_id: str | None = None) -> Any:
    """A chart of one order (the first, if not named) or list, as a `plotly.graph_objects.Figure`.

    Parameters
    ----------
    name : slices, remaining, cost, imbalance, distribution or frontier; of a list planned as one
        also sides, left, currencies, exposures, risk, list_distribution, corridor:cash ...

    Raises:
        MisuseError: no such chart or order. MissingExtraError: plotly is not installed.
    """
    if name not in CHARTS:
        return _list_figure(plan, name)
    names = plan.book.names
    if order_id is not None and order_id not in names:
        more = f" and {len(names) - _LISTED} more" if len(names) > _LISTED else ""
        raise MisuseError(
            f"no order is called {order_id!r}; there are {', '.join(names[:_LISTED])}{more}"
        )
    order = 0 if order_id is None else names.index(order_id)
    title = f"{CHARTS[name].question} {_order_text(plan, order)}"
    missing = why_missing(plan, name, order)
    return filled_figure(CHARTS[name], title, _values(plan, name, order), missing)


def _list_figure(plan: Plan, name: str) -> Any:
    lines = None if plan.transition is None else ListLines(plan)
    found = {} if lines is None else drawn(lines)
    if lines is None or name not in found:
        there = ", ".join([*CHARTS, *found])
        raise MisuseError(f"no chart is called {name!r}; there are {there}")
    chart, values = found[name]
    known = None if values is None else lines.axis_values | values
    return filled_figure(chart, chart.question, known, CERTAIN)


def filled_figure(chart: Chart, title: str, values: dict[str, Any] | None, missing: str) -> Any:
    """A chart with its values as a plotly figure; with none, the words for what is missing."""
    figures = need_plotly("graph_objects")
    heading = {"text": escape(title)}
    if values is None:
        note = {"text": missing, "showarrow": False}
        return figures.Figure(layout={"title": heading, "annotations": [note]})
    layout = filled(chart.layout, values)
    layout |= {"title": heading, "margin": layout["margin"] | {"t": 96}}
    return figures.Figure(data=filled(chart.traces, values), layout=layout)


def why_missing(plan: Plan, name: str, order: int) -> str:
    """Why a chart of an order has nothing to draw."""
    if name == "frontier" and plan.transition is not None:
        return LEFT_OUT
    return SHARED if name == "frontier" and shares_state(plan, order) else CERTAIN


def need_plotly(module: str) -> Any:
    """A module of plotly.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    try:
        return import_module(f"plotly.{module}")
    except ModuleNotFoundError as error:
        raise MissingExtraError(
            "charts need plotly, which is not installed; pip install 'headrace[report]'"
        ) from error


def _values(plan: Plan, name: str, order: int) -> dict[str, Any] | None:
    """What a chart's `@name`s stand for; None where there is nothing to draw."""
    if name == "distribution":
        return density(plan.figures, order)
    if name == "frontier":
        alone = plan.transition is None
        return frontiers(plan, np.array([order]))[0] if alone else None
    lines = Lines(plan)
    axis = lines.axis(order)
    return {**axis_data(axis), **lines.of(order, axis)}


def _order_text(plan: Plan, order: int) -> str:
    row = plan.summary["orders"][plan.book.names[order]]
    return f"{plan.book.names[order]}: {row['side']} {row['quantity']:,.10g} {row['symbol']}"
