"""The charts of the final cost: its distribution, and cost against risk."""

from __future__ import annotations

from typing import Any

from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line


def _curve(y: str, name: str, line: dict[str, Any], **more: Any) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines",
        "x": "@density_x",
        "y": y,
        "name": name,
        "line": line,
        "hoverinfo": "skip",
        **more,
    }


def _stems(key: str, **more: Any) -> dict[str, Any]:
    """Upright lines at marked costs."""
    return {
        "type": "scatter",
        "mode": "lines",
        "x": f"@{key}_x",
        "y": f"@{key}_y",
        "hovertemplate": "%{x:,.1f} bps<extra></extra>",
        **more,
    }


def _labels(x: str, y: str, text: str, side: Any) -> dict[str, Any]:
    """Texts beside points. A trace of their own: plotly loses some of a line's on redrawing."""
    return {
        "type": "scatter",
        "mode": "text",
        "x": x,
        "y": y,
        "text": text,
        "textposition": side,
        "cliponaxis": False,
        "showlegend": False,
        "hoverinfo": "skip",
    }


_SIDES = ["top left", "top center", "middle right", "middle right", "middle right"]

DISTRIBUTION = Chart(
    "What may it cost in the end?",
    "How likely each cost is; marks show the chance of staying below. Hatched: the dearest 5 %, "
    "whose mean is the expected shortfall (ES). Thin dashes: a normal law of the same mean and "
    "standard deviation.",
    (
        {
            "type": "scatter",
            "mode": "none",
            "x": "@tail_x",
            "y": "@tail",
            "fill": "tozeroy",
            "fillpattern": {"shape": "/", "fgcolor": p.PLAN, "bgcolor": "white", "size": 7},
            "showlegend": False,
            "hoverinfo": "skip",
        },
        _curve("@mixture", "the model's law", line(p.PLAN, 3)),
        _curve("@normal", "normal law", line(p.EVEN, 1.6, p.EVEN_DASH)),
        _stems("mark", line=line(p.TEXT, 1.4), showlegend=False),
        _stems("shortfall", line=line(p.TEXT, 1.4, "5px,3px"), name="expected shortfall"),
        _labels("@label_x", "@label_y", "@label_text", _SIDES),
    ),
    layout(
        axis("cost, bps", range="@cost_range"),
        axis("likelihood", showticklabels=False, showgrid=False, ticks="", range="@density_range"),
    ),
)


def _point(key: str, name: str, symbol: str, color: str, size: int) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "markers",
        "x": f"@{key}_risk",
        "y": f"@{key}_cost",
        "name": name,
        "marker": {
            "symbol": symbol,
            "size": size,
            "color": color,
            "line": {"color": "white", "width": 1.5},
        },
        "hovertemplate": f"cost %{{y:,.2f}} bps<br>risk %{{x:,.2f}} bps<extra>{name}</extra>",
    }


FRONTIER = Chart(
    "Is there a better trade-off?",
    "The curve is the least expected cost at each risk; U is the urgency that asks for it. Below "
    "and left is better: nothing under these caps lies below the curve.",
    (
        {
            "type": "scatter",
            "mode": "lines+markers",
            "x": "@frontier_risk",
            "y": "@frontier_cost",
            "name": "best attainable",
            "customdata": "@frontier_urgency",
            "line": line(p.PLAN, 2),
            "marker": {"size": 4, "color": p.PLAN},
            "hovertemplate": "urgency %{customdata:.3g}<br>cost %{y:,.2f} bps<br>"
            "risk %{x:,.2f} bps<extra></extra>",
        },
        _labels("@urgency_risk", "@urgency_cost", "@urgency_text", "@urgency_side"),
        _point("evenly", "evenly timed", p.EVEN_MARK, p.EVEN, 11),
        _point("by_volume", "in proportion to volume", p.VOLUME_MARK, p.VOLUME, 11),
        _point("plan", "this plan", p.PLAN_MARK, p.PLAN, 16),
    ),
    layout(
        axis("risk: standard deviation, bps", range="@risk_range"),
        axis("expected cost, bps", range="@frontier_range"),
    ),
)
