"""The report of a grid: one page that holds everything and asks the network for nothing."""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.report.frame import drawn, framed, page_part
from scheduler.report.markup import bare_table, counted, number, tiles
from scheduler.report.overview import notes_block
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
    value = result.book.arrays.market.price * result.book.arrays.quantity
    largest = np.argsort(-value, kind="stable")[:_DRAWN]
    orders = [OrderScenarios(result, order) for order in sorted(largest.tolist())]
    left_out = len(result.book.names) - len(orders)
    return framed(
        result,
        {"orders": [_order(order) for order in orders]},
        heading="What if",
        title="What if",
        asked=_grid_text(result),
        above=[_totals(result), notes_block(result.notes), _overview(orders)],
        names=[order.title for order in orders],
        inside=page_part("grid_order.html"),
        left_out=(
            f"The {counted(len(orders), 'order')} of most value; the table of scenarios has "
            f"{left_out:,} more."
            if left_out
            else ""
        ),
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
        "charts": drawn(order.charts()),
        "small": drawn(order.small()),
        "cards": order.cards(),
        "rows": order.table(),
    }
