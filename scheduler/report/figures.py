"""One chart of one order, as a plotly figure."""

from __future__ import annotations

from html import escape
from importlib import import_module
from typing import Any

import numpy as np

from scheduler.errors import MissingExtraError, MisuseError
from scheduler.plan import Plan
from scheduler.report.chart import filled
from scheduler.report.charts import CHARTS
from scheduler.report.density import density
from scheduler.report.frontier import frontiers
from scheduler.report.lines import Lines, axis_data

_LISTED = 20


def figure(plan: Plan, name: str, order_id: str | None = None) -> Any:
    """A chart of one order (the first, if not named), as a `plotly.graph_objects.Figure`.

    Parameters
    ----------
    name : slices, remaining, cost, imbalance, distribution or frontier.

    Raises:
        MisuseError: no such chart or order. MissingExtraError: plotly is not installed.
    """
    if name not in CHARTS:
        raise MisuseError(f"no chart is called {name!r}; there are {', '.join(CHARTS)}")
    names = plan.book.names
    if order_id is not None and order_id not in names:
        more = f" and {len(names) - _LISTED} more" if len(names) > _LISTED else ""
        raise MisuseError(
            f"no order is called {order_id!r}; there are {', '.join(names[:_LISTED])}{more}"
        )
    order = 0 if order_id is None else names.index(order_id)
    figures = need_plotly("graph_objects")
    title = {"text": escape(f"{CHARTS[name].question} {_order_text(plan, order)}")}
    values = _values(plan, name, order)
    if values is None:
        note = {"text": "nothing is at risk: the cost is certain", "showarrow": False}
        return figures.Figure(layout={"title": title, "annotations": [note]})
    layout = filled(CHARTS[name].layout, values)
    layout |= {"title": title, "margin": layout["margin"] | {"t": 96}}
    return figures.Figure(data=filled(CHARTS[name].traces, values), layout=layout)


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
        return frontiers(plan, np.array([order]))[0]
    lines = Lines(plan)
    axis = lines.axis(order)
    return {**axis_data(axis), **lines.of(order, axis)}


def _order_text(plan: Plan, order: int) -> str:
    row = plan.summary["orders"][plan.book.names[order]]
    return f"{plan.book.names[order]}: {row['side']} {row['quantity']:,.10g} {row['symbol']}"
