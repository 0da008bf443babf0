"""The charts of a review: the parts of a shortfall, and an outcome in the law it was promised."""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Array
from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line
from scheduler.report.density import density_of
from scheduler.shortfall.parts import PARTS, part_words

_MARGIN = 1.06  # beside an outcome that lies beyond the law's drawn range
_FEWEST = 5  # outcomes below which nothing is to be seen of them together


def parts_chart(row: dict[str, Any]) -> Chart:
    """Each part of a shortfall from the end of the one before it, bps of the paper value."""
    known = [name for name in PARTS if row[name] is not None]
    bps = 1e4 / row["notional"]
    return Chart(
        "Where did the shortfall come from?",
        "Each part begins where the last one ended; a part below 0 was gained. Displacement is "
        "what the model expects of these fills, timing how the market moved beside that.",
        (
            {
                "type": "waterfall",
                "x": [*(part_words(name, row) for name in known), "shortfall"],
                "y": [*(bps * row[name] for name in known), bps * row["shortfall"]],
                "measure": [*["relative"] * len(known), "total"],
                "increasing": {"marker": {"color": p.EVEN}},
                "decreasing": {"marker": {"color": p.VOLUME}},
                "totals": {"marker": {"color": p.PLAN}},
                "connector": {"line": {"color": p.OTHERS, "width": 1}},
                "hovertemplate": "%{x}: %{delta:+,.2f} bps<extra></extra>",
            },
        ),
        layout(axis("", type="category"), axis("bps of the paper value", zeroline=True)),
    )


def outcome_chart(law: CostDistribution, cost: float, value: float, whose: str) -> Chart | None:
    """The law's density with the outcome marked, bps of what traded; None of a certain cost."""
    drawn = density_of(law, value)
    if drawn is None:
        return None
    bps = 1e4 * cost / value
    low, high = drawn["cost_range"]
    middle = 0.5 * (low + high)
    reach = max(0.5 * (high - low), _MARGIN * abs(bps - middle))
    top = drawn["density_range"][1]
    return Chart(
        "Does chance explain the cost?",
        f"Shaded: how likely each cost was, by {whose}. Upright: the cost that came.",
        (
            {
                "type": "scatter",
                "mode": "lines",
                "x": drawn["density_x"],
                "y": drawn["mixture"],
                "name": "promised",
                "line": line(p.PLAN, 3),
                "fill": "tozeroy",
                "fillcolor": p.BAND,
                "hoverinfo": "skip",
            },
            {
                "type": "scatter",
                "mode": "lines+markers",
                "x": [bps, bps],
                "y": [0.0, 0.9 * top],
                "name": "came",
                "line": line(p.EVEN, 3, p.EVEN_DASH),
                "marker": {"symbol": p.PLAN_MARK, "size": [0, 12], "color": p.EVEN},
                "hovertemplate": "%{x:,.2f} bps<extra></extra>",
            },
        ),
        layout(
            axis("cost of what traded, bps", range=[middle - reach, middle + reach]),
            axis("likelihood", showticklabels=False, showgrid=False, ticks="", range=[0.0, top]),
        ),
    )


def together_chart(names: list[str], quantile: Array, flagged: list[bool]) -> Chart | None:
    """Outcomes of all orders in their laws, from low to high, beside what chance alone gives."""
    order = np.argsort(quantile, kind="stable")
    order = order[~np.isnan(quantile[order])]
    count = len(order)
    if count < _FEWEST:
        return None
    even = (np.arange(count) + 0.5) / count
    marks = [p.PLAN_MARK if flagged[at] else p.VOLUME_MARK for at in order.tolist()]
    colors = [p.EVEN if flagged[at] else p.PLAN for at in order.tolist()]
    return Chart(
        "Do the outcomes together look like chance?",
        "Each order's place in its promised law, from cheap to dear. By chance they lie about the "
        "dashes; above them the list came dearer than promised. Diamonds are flagged.",
        (
            {
                "type": "scatter",
                "mode": "lines",
                "x": [0.0, 100.0],
                "y": [0.0, 100.0],
                "name": "chance alone",
                "line": line(p.OTHERS, 2, p.EVEN_DASH),
                "hoverinfo": "skip",
            },
            {
                "type": "scatter",
                "mode": "markers",
                "x": (100.0 * even).tolist(),
                "y": (100.0 * quantile[order]).tolist(),
                "text": [names[at] for at in order.tolist()],
                "name": "orders",
                "marker": {"symbol": marks, "size": 8, "color": colors},
                "hovertemplate": "%{text}: %{y:.1f} %<extra></extra>",
            },
        ),
        layout(
            axis("by chance, %", range=[0.0, 100.0]),
            axis("quantile in the promised law, %", range=[0.0, 100.0]),
        ),
    )
