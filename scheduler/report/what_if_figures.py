"""Charts of a grid as plotly figures, for notebooks."""

from __future__ import annotations

from typing import Any

from scheduler.errors import MisuseError
from scheduler.report.figures import filled_figure
from scheduler.report.what_if_orders import OrderScenarios
from scheduler.what_if import WhatIf


def figure(result: WhatIf, name: str, order_id: str | None = None) -> Any:
    """A chart of one order (the first, if not named), as a `plotly.graph_objects.Figure`.

    Parameters
    ----------
    name : frontier, or regret (over the first two world axes, or the only one).

    Raises:
        MisuseError: no such chart or order, or no axis for it. MissingExtraError: no plotly.
    """
    names = result.book.names
    if order_id is not None and order_id not in names:
        raise MisuseError(f"no order is called {order_id!r}; see the table of scenarios")
    order = OrderScenarios(result, 0 if order_id is None else names.index(order_id))
    charts = {"frontier": order.frontier, "regret": order.regret}
    if name not in charts:
        raise MisuseError(f"no chart is called {name!r}; there are {', '.join(charts)}")
    chart = next(charts[name](), None)
    if chart is None:
        needed = "urgency or risk_aversion" if name == "frontier" else "a world axis"
        raise MisuseError(f"the grid has no {name}; vary {needed}")
    return filled_figure(chart, f"{chart.question} {order.title}", {}, "")
