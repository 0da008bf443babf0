"""A chart as data: a plotly figure in which `@name` stands for a value of the order drawn.

Python (`filled`) and the page's script put the values in, so a chart is described once and drawn
alike in a notebook and on the page, however many orders the page holds.
"""

from __future__ import annotations

from dataclasses import dataclass
from html import escape
from typing import Any

from scheduler.report import palette as p

_DIGITS = 6  # of what is drawn; share counts are kept whole
_EXACT = frozenset({"shares", "remaining"})


@dataclass(frozen=True)
class Chart:
    """question : its title. reading : how to read it. traces, layout : plotly's, with `@name`."""

    question: str
    reading: str
    traces: tuple[dict[str, Any], ...]
    layout: dict[str, Any]


def filled(node: Any, values: dict[str, Any]) -> Any:
    """The description with every `@name` replaced by its value."""
    if isinstance(node, str):
        return values[node[1:]] if node.startswith("@") else node
    if isinstance(node, dict):
        return {key: filled(value, values) for key, value in node.items()}
    if isinstance(node, (list, tuple)):
        return [filled(value, values) for value in node]
    return node


def chart_box(chart: Chart, key: str) -> str:
    """HTML for the page's script to draw in; `key` is the attribute that names the chart."""
    return (
        f'<figure><h3>{escape(chart.question)}</h3><div class="chart" {key}></div>'
        f"<figcaption>{escape(chart.reading)}</figcaption></figure>"
    )


def rounded(values: dict[str, Any]) -> dict[str, Any]:
    """Values with the digits that a screen can show; share counts as they are."""
    return {key: value if key in _EXACT else _rounded(value) for key, value in values.items()}


def _rounded(value: Any) -> Any:
    if isinstance(value, float):
        short = float(f"{value:.{_DIGITS}g}")
        return int(short) if short.is_integer() else short
    return [_rounded(item) for item in value] if isinstance(value, list) else value


def axis(title: str, **more: Any) -> dict[str, Any]:
    return {
        "title": {"text": title, "standoff": 8},
        "gridcolor": p.GRID,
        "zeroline": False,
        "linecolor": p.OTHERS,
        "ticks": "outside",
        "tickcolor": p.OTHERS,
        "automargin": True,
        **more,
    }


def layout(x: dict[str, Any], y: dict[str, Any], **more: Any) -> dict[str, Any]:
    return {
        "font": {"family": "system-ui, Segoe UI, Arial, sans-serif", "size": 13, "color": p.TEXT},
        "paper_bgcolor": "white",
        "plot_bgcolor": "white",
        "margin": {"l": 64, "r": 20, "t": 40, "b": 56},
        "legend": {"orientation": "h", "x": 0, "y": 1.01, "yanchor": "bottom"},
        "hovermode": "closest",
        "xaxis": x,
        "yaxis": y,
        **more,
    }


def line(color: str, width: float, dash: str = "solid") -> dict[str, Any]:
    return {"color": color, "width": width, "dash": dash}
