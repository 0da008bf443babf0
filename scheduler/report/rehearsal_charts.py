"""The charts of a rehearsal: costs beside the promised law, and how often they kept to it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Array
from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line
from scheduler.report.density import density_of

_BINS = 60
_STYLES = (
    (p.EVEN, p.EVEN_DASH, p.EVEN_MARK),
    (p.VOLUME, p.VOLUME_DASH, p.VOLUME_MARK),
    (p.TEXT, "10px,3px,2px,3px", p.PLAN_MARK),
)


def costs_chart(law: CostDistribution, costs: Mapping[str, Array], notional: float) -> Chart:
    """The promised density, and the costs of each case as steps; bps of the notional."""
    drawn = density_of(law, notional)
    bps = 1e4 / notional
    traces: list[dict[str, Any]] = []
    if drawn is not None:
        traces.append(
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
            }
        )
    low, high = (drawn or {"cost_range": [-1.0, 1.0]})["cost_range"]
    for (name, cost), (color, dash, _) in zip(costs.items(), _STYLES, strict=False):
        bins = int(min(_BINS, max(8, 2.0 * np.sqrt(len(cost)))))
        count, edges = np.histogram(bps * cost, bins=bins, range=(low, high))
        height = count / (len(cost) * np.diff(edges))
        traces.append(
            {
                "type": "scatter",
                "mode": "lines",
                "x": edges.tolist(),
                "y": [*height.tolist(), 0.0],
                "line": {**line(color, 2, dash), "shape": "hv"},
                "name": name,
                "hovertemplate": "%{x:,.1f} bps<extra></extra>",
            }
        )
    return Chart(
        "Do the costs have the law that was promised?",
        "Shaded: the plan's own law. Steps: how often each cost came, case by case.",
        tuple(traces),
        layout(
            axis("cost, bps", range=[low, high]),
            axis("likelihood", showticklabels=False, showgrid=False, ticks="", rangemode="tozero"),
        ),
    )


def coverage_chart(coverage: Mapping[str, Mapping[str, Any]]) -> Chart:
    """Share of paths at or below each promised quantile, less what was promised, in points."""
    traces = []
    for (name, shares), (color, _, mark) in zip(coverage.items(), _STYLES, strict=False):
        promised = [float(text) for text in shares]
        traces.append(
            {
                "type": "scatter",
                "mode": "markers",
                "x": [f"{100 * value:g} %" for value in promised],
                "y": [
                    100.0 * (row["share"] - value)
                    for value, row in zip(promised, shares.values(), strict=True)
                ],
                "error_y": {
                    "type": "data",
                    "array": [196.0 * row["error"] for row in shares.values()],
                    "color": color,
                },
                "marker": {"symbol": mark, "size": 9, "color": color},
                "name": name,
                "hovertemplate": "%{y:+.2f} points<extra></extra>",
            }
        )
    return Chart(
        "How often did the costs stay below what was promised?",
        "Share of paths below each promised quantile, less the promise: 0 is as promised, below 0 "
        "costs went beyond it more often. Bars: what chance allows, 95 %.",
        tuple(traces),
        layout(
            axis("promised chance of staying below", type="category"),
            axis("points", zeroline=True, zerolinecolor=p.OTHERS, tickformat="+.1f"),
        ),
    )


def left_chart(residual: Array, quantity: float) -> Chart | None:
    """What stays undone, over the paths in which something does; None if nothing ever does."""
    left = 100.0 * residual[residual > 0.0] / quantity
    if not len(left):
        return None
    count, edges = np.histogram(left, bins=40, range=(0.0, float(left.max())))
    return Chart(
        "How much may stay undone?",
        f"Of the {100.0 * len(left) / len(residual):.1f} % of paths in which caps on thin volume "
        "leave something: how much of the order.",
        (
            {
                "type": "bar",
                "x": (0.5 * (edges[1:] + edges[:-1])).tolist(),
                "y": (100.0 * count / len(residual)).tolist(),
                "marker": {"color": p.PLAN},
                "hovertemplate": "%{x:.1f} % left in %{y:.2f} % of paths<extra></extra>",
            },
        ),
        layout(axis("left at the end, % of the order"), axis("% of paths")),
    )
