"""The report of a grid: one page that holds everything and asks the network for nothing."""

from __future__ import annotations

import json
from html import escape
from string import Template
from typing import Any

import numpy as np

from scheduler.report.chart import Chart, rounded
from scheduler.report.figures import need_plotly
from scheduler.report.files import packed, page_file
from scheduler.report.markup import bare_table, counted, number, tiles
from scheduler.report.overview import notes_block, session_text, settings_block
from scheduler.report.what_if_orders import OrderScenarios
from scheduler.report.what_if_words import AXIS_WORDS, value_text
from scheduler.what_if import WhatIf

_DRAWN = 12  # orders drawn, the largest
_LISTED = 8  # values of an axis written out


def page(result: WhatIf) -> str:
    """A self-contained HTML page of a grid.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    script = need_plotly("offline").get_plotlyjs()
    drawn = np.argsort(
        -result.book.arrays.market.price * result.book.arrays.quantity, kind="stable"
    )
    orders = [OrderScenarios(result, order) for order in sorted(drawn[:_DRAWN].tolist())]
    data = {"orders": [_order(order) for order in orders]}
    left_out = len(result.book.names) - len(orders)
    picker = "".join(
        f'<option value="{place}">{escape(order.title)}</option>'
        for place, order in enumerate(orders)
    )
    return Template(page_file("what_if.html")).substitute(
        title=escape(f"What if {result.summary['date']}"),
        style=page_file("page.css"),
        session=escape(session_text(result)),
        grid=escape(_grid_text(result)),
        caution=escape(result.summary["caution"]),
        totals=_totals(result),
        notes=notes_block(result.notes),
        orders=_overview(orders),
        picker=picker,
        several="" if len(orders) > 1 else "hidden",
        left_out=escape(
            f"The {counted(len(orders), 'order')} of most value; the table of scenarios has "
            f"{left_out:,} more."
            if left_out
            else ""
        ),
        settings=settings_block(result),
        data=packed(json.dumps(data, separators=(",", ":"), allow_nan=False)),
        plotly=packed(script),
        script=page_file("draw.js") + page_file("what_if.js"),
    )


def _grid_text(result: WhatIf) -> str:
    parts = []
    for name, values in result.grid.axes.items():
        texts = [value_text(value) for value in values]
        if len(texts) > _LISTED:
            texts = [*texts[: _LISTED // 2], "…", *texts[-_LISTED // 2 :]]
        parts.append(f"{AXIS_WORDS[name]}: {', '.join(texts)}")
    return "Every combination of " + "; ".join(parts) + "."


def _totals(result: WhatIf) -> str:
    status = result.summary["status"]
    words = ", ".join(f"{count:,} {name}" for name, count in status.items())
    return tiles(
        [
            ("Points", number(len(result.grid)), "and the base"),
            ("Orders", number(len(result.book.names)), "each solved alone"),
            ("Rows", number(len(result.table)), words),
        ]
    )


def _overview(orders: list[OrderScenarios]) -> str:
    """All orders in a table, where there are several."""
    if len(orders) == 1:
        return ""
    lines = [order.overview() for order in orders]
    inside = bare_table(list(lines[0]), [list(line.values()) for line in lines])
    return f'<h2>Orders</h2><div class="scroll" tabindex="0">{inside}</div>'


def _order(order: OrderScenarios) -> dict[str, Any]:
    return {
        "title": order.title,
        "tiles": order.tiles(),
        "charts": [_drawn(chart) for chart in order.charts()],
        "small": [_drawn(chart) for chart in order.small()],
        "cards": order.cards(),
        "rows": order.table(),
    }


def _drawn(chart: Chart) -> dict[str, Any]:
    return {
        "question": chart.question,
        "reading": chart.reading,
        "traces": [rounded(trace) for trace in chart.traces],
        "layout": chart.layout,
    }
