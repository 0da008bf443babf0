"""The charts of the page: those of the report, smaller, with what was pinned drawn beside.

The page's own script draws them, not plotly: three charts cost plotly 40 to 80 ms, most of the
100 ms in which they are to follow a slider. It knows what these descriptions use, and no more.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, line
from scheduler.report.law_charts import FRONTIER
from scheduler.report.time_charts import REMAINING, SLICES, over_time, path_line

_PINNED = p.SERIES[3]
_MARGIN = {"l": 58, "r": 14, "t": 8, "b": 42}
_SMALL: dict[str, Any] = {"margin": _MARGIN}


def _small(chart: Chart, *more: dict[str, Any], **layout: Any) -> Chart:
    traces = (*chart.traces, *more)
    return replace(chart, traces=traces, layout=chart.layout | _SMALL | layout)


def _drawn(chart: Chart) -> tuple[dict[str, Any], ...]:
    """The traces of a chart without those that stand for an entry of its legend."""
    return tuple(t for t in chart.traces if t["x"] != [None] or "yaxis" in t)


def _pinned_line(value: str) -> dict[str, Any]:
    return path_line(
        "@pin_left",
        "pinned",
        value,
        line(_PINNED[0], 1.8, _PINNED[1]),
        x="@pin_x",
        text="@pin_time",
        visible="@has_pin",
    )


_PINNED_POINT = {
    "type": "scatter",
    "mode": "markers",
    "x": "@pin_risk",
    "y": "@pin_cost",
    "name": "pinned",
    "visible": "@has_pin",
    "marker": {"symbol": "star", "size": 13, "color": p.TEXT},
    "hovertemplate": "cost %{y:,.2f} bps<br>risk %{x:,.2f} bps<extra>pinned</extra>",
}

_ASKED = _small(FRONTIER, _PINNED_POINT)

ORDER = {
    "slices": replace(_small(SLICES, margin=_MARGIN | {"r": 58}), traces=_drawn(SLICES)),
    "left": _small(REMAINING, _pinned_line("%{y:,.0f} shares left")),
    "frontier": _ASKED,
}


def _bars(name: str, words: str, hatch: str) -> dict[str, Any]:
    return {
        "type": "bar",
        "x": "@centre",
        "y": f"@{name}",
        "width": "@bar_width",
        "name": words,
        "marker": {
            "color": p.PLAN,
            "line": {"color": p.PLAN, "width": 1},
            "pattern": {
                "shape": hatch,
                "fillmode": "replace",
                "fgcolor": p.PLAN,
                "bgcolor": "white",
                "size": 7,
                "solidity": 0.45,
            },
        },
        "text": "@bucket",
        "textposition": "none",
        "hovertemplate": f"%{{text}}<br>%{{y:,.0f}}<extra>{words}</extra>",
    }


_LIST_SLICES = Chart(
    "When is how much traded?",
    "Value bought, above zero, and sold, below it, in each interval of the list's clock.",
    (_bars("bought", "bought", p.FREE), _bars("sold", "sold", p.AT_CAP)),
    over_time(
        axis("@money_title", zeroline=True, zerolinecolor=p.OTHERS), barmode="relative", bargap=0
    ),
)

_LEFT = "%{y:,.0f} left"
_LIST_LEFT = Chart(
    "How much is left?",
    "Gross value still to trade, beside two simple schedules under the same caps.",
    (
        path_line("@left", "this plan", _LEFT, line(p.PLAN, 3)),
        path_line("@left_evenly", "evenly timed", _LEFT, line(p.EVEN, 1.6, p.EVEN_DASH)),
        path_line(
            "@left_by_volume",
            "in proportion to volume",
            _LEFT,
            line(p.VOLUME, 1.8, p.VOLUME_DASH),
        ),
    ),
    over_time(axis("@money_title", rangemode="tozero")),
)

LIST = {
    "slices": _small(_LIST_SLICES),
    "left": _small(_LIST_LEFT, _pinned_line(_LEFT)),
    "frontier": _ASKED,
}


_LINES = (
    ("plan", "this plan"),
    ("evenly", "evenly timed"),
    ("by-volume", "in proportion to volume"),
    ("pinned", "pinned"),
)
_CURVE = (("plan", "the least cost at each risk; marks as in the table beside"),)
_LEGENDS = {
    "order": {
        "slices": (
            ("slice", "slice"),
            ("at-cap", "at cap"),
            ("auction", "auction"),
            ("auction-at-cap", "auction at cap"),
            ("cap", "cap"),
            ("others", "others’ volume"),
        ),
        "left": _LINES,
        "frontier": _CURVE,
    },
    "list": {
        "slices": (("slice", "bought"), ("at-cap", "sold")),
        "left": _LINES,
        "frontier": _CURVE,
    },
}
"""Swatches, by their class in the page's style, and words. Points are named in the table."""


def described() -> dict[str, dict[str, Any]]:
    """All charts as the page's script takes them."""
    return {
        kind: {
            name: {
                "question": chart.question,
                "reading": chart.reading,
                "legend": _LEGENDS[kind][name],
                "traces": chart.traces,
                "layout": chart.layout,
            }
            for name, chart in charts.items()
        }
        for kind, charts in (("order", ORDER), ("list", LIST))
    }
