"""The charts of a grid: frontiers with their knees, regret, and what is left over time."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from scheduler.model.ragged import Array
from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line
from scheduler.report.clock_axis import ClockAxis
from scheduler.report.lines import pauses
from scheduler.report.markup import MISSING
from scheduler.report.ticks import ticks
from scheduler.report.what_if_words import AXIS_WORDS, point_text, value_text
from scheduler.scenarios import Frontier, Value

_SCALE = [[0.0, "#f7f8fa"], [0.15, "#cfdceb"], [0.45, "#7ea3c8"], [1.0, p.PLAN]]
"""White to the dark blue of the plan: one hue, told apart by lightness alone."""


def frontier_chart(lines: Sequence[Frontier], base: tuple[float, float]) -> Chart:
    """Curves of cost against risk with their knees; `base` is (risk, cost) of the base."""
    traces: list[dict[str, Any]] = []
    for place, (found, (color, dash)) in enumerate(zip(lines, p.SERIES, strict=False)):
        name = point_text(found.values) if found.values else "best attainable"
        traces.append(_curve(found, name, line(color, 2.2, dash)))
        if found.knee is not None:
            traces.append(_knee(found, color, labelled=place == 0))
    traces.append(
        _marks([base[0]], [base[1]], "base", {"symbol": p.PLAN_MARK, "size": 13, "color": p.TEXT})
    )
    return Chart(
        "Where does patience stop paying?",
        "Each curve is the least expected cost at each risk, patient (right) to urgent (left). "
        "The ringed point is the knee: with cost and risk scaled to their ranges it lies farthest "
        "from the straight line between the ends.",
        tuple(traces),
        layout(
            axis("risk: standard deviation, bps"),
            axis("expected cost, bps"),
        ),
    )


def _curve(found: Frontier, name: str, style: dict[str, Any]) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines+markers",
        "x": found.risk.tolist(),
        "y": found.cost.tolist(),
        "customdata": found.aim.tolist(),
        "name": name,
        "line": style,
        "marker": {"size": 4, "color": style["color"]},
        "hovertemplate": "aim %{customdata:.3g}<br>cost %{y:,.2f} bps<br>risk %{x:,.2f} bps"
        f"<extra>{name}</extra>",
    }


def _knee(found: Frontier, color: str, *, labelled: bool) -> dict[str, Any]:
    """A ring about the knee; of several only the first has its text, which others would cross."""
    k = found.knee
    assert k is not None
    return {
        "type": "scatter",
        "mode": "markers+text",
        "x": [float(found.risk[k])],
        "y": [float(found.cost[k])],
        "text": [f"knee at {found.aim[k]:.3g}" if labelled else ""],
        "textposition": "bottom left",
        "textfont": {"color": color},
        "marker": {
            "symbol": "circle-open",
            "size": 15,
            "color": color,
            "line": {"width": 3, "color": color},
        },
        "cliponaxis": False,
        "showlegend": False,
        "hoverinfo": "skip",
    }


def _marks(x: list[float], y: list[float], name: str, marker: dict[str, Any]) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "markers",
        "x": x,
        "y": y,
        "name": name,
        "marker": {**marker, "line": {"color": "white", "width": 1.5}},
        "hovertemplate": f"cost %{{y:,.2f}} bps<br>risk %{{x:,.2f}} bps<extra>{name}</extra>",
    }


def regret_map(
    x: tuple[str, Sequence[Value]], y: tuple[str, Sequence[Value]], regret: Array, fixed: str
) -> Chart:
    """Regret in bps over two world axes, (len(y), len(x)); nan where there is no schedule."""
    texts = [[_cell(value) for value in row] for row in regret.tolist()]
    heat = {
        "type": "heatmap",
        "x": [value_text(value) for value in x[1]],
        "y": [value_text(value) for value in y[1]],
        "z": _without_nan(regret),
        "text": texts,
        "texttemplate": "%{text}",
        "colorscale": _SCALE,
        "xgap": 2,
        "ygap": 2,
        "zmin": 0.0,
        "zmax": max(float(np.nanmax(regret, initial=0.0)), 1e-9),
        "colorbar": {"title": {"text": "regret, bps"}, "thickness": 12},
        "hovertemplate": f"{AXIS_WORDS[x[0]]} %{{x}}<br>{AXIS_WORDS[y[0]]} %{{y}}<br>"
        "regret %{text} bps<extra></extra>",
    }
    return Chart(
        _survives(x[0], y[0]),
        _REGRET + fixed,
        (heat,),
        layout(
            axis(AXIS_WORDS[x[0]], type="category", showgrid=False),
            axis(AXIS_WORDS[y[0]], type="category", showgrid=False),
        ),
    )


def regret_bars(x: tuple[str, Sequence[Value]], regret: Array, fixed: str) -> Chart:
    """Regret in bps along one world axis."""
    bars = {
        "type": "bar",
        "x": [value_text(value) for value in x[1]],
        "y": _without_nan(regret),
        "text": [_cell(value) for value in regret.tolist()],
        "textposition": "outside",
        "cliponaxis": False,
        "marker": {"color": p.PLAN},
        "width": 0.5,
        "hovertemplate": f"{AXIS_WORDS[x[0]]} %{{x}}<br>regret %{{text}} bps<extra></extra>",
    }
    return Chart(
        _survives(x[0]),
        _REGRET + fixed,
        (bars,),
        layout(
            axis(AXIS_WORDS[x[0]], type="category", showgrid=False),
            axis("regret, bps", rangemode="tozero"),
        ),
    )


_REGRET = (
    "Regret: what the schedule made for the base world costs more, risk at its price included, "
    "than one made for the world shown. A dash: no schedule keeps the limits there."
)


def _survives(*names: str) -> str:
    return f"Does the schedule survive another {' and '.join(names).replace('_', ' ')}?"


def _cell(value: float) -> str:
    return MISSING if np.isnan(value) else f"{value:.2g}" if value < 9.95 else f"{value:,.0f}"


def _without_nan(values: Array) -> list[Any]:
    return [
        _without_nan(item) if isinstance(item, np.ndarray) else None if np.isnan(item) else item
        for item in (list(values) if values.ndim > 1 else values.tolist())
    ]


def left_chart(
    title: str, clock: ClockAxis, left: list[float], base: list[float] | None, below: str
) -> Chart:
    """Small: % still to trade over time at one point, the base's dashed behind it."""
    x = clock.path(0.0, clock.right.tolist())
    at, text = ticks(clock)
    few = slice(None, None, 2 if len(at) > 5 else 1)
    traces = (
        []
        if base is None
        else [_left(x, clock.path(100.0, base), "base", line(p.EVEN, 1.8, p.EVEN_DASH))]
    )
    traces.append(_left(x, clock.path(100.0, left), title, line(p.PLAN, 2.6)))
    return Chart(
        title,
        below,
        tuple(traces),
        layout(
            axis(
                "",
                tickvals=at[few],
                ticktext=text[few],
                tickangle=0,
                showgrid=False,
                range=[0.0, clock.length],
            ),
            axis("% left", range=[0.0, 103.0], fixedrange=True),
            shapes=pauses(clock),
            showlegend=False,
            margin={"l": 48, "r": 12, "t": 8, "b": 40},
        ),
    )


def _left(x: list[Any], y: list[Any], name: str, style: dict[str, Any]) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines",
        "x": x,
        "y": y,
        "name": name,
        "line": style,
        "hovertemplate": "%{y:.1f} % left<extra></extra>",
    }
