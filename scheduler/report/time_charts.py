"""The charts over time: slices, what is left, cost so far, imbalance."""

from __future__ import annotations

from typing import Any

from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line


def over_time(y: dict[str, Any], anchor: str = "y", **more: Any) -> dict[str, Any]:
    """A layout over the clock axis."""
    x = axis(
        "@x_title",
        anchor=anchor,
        range="@x_range",
        tickvals="@tick_x",
        ticktext="@tick_text",
        tickangle=0,
        showgrid=False,
    )
    return layout(x, y, shapes="@pauses", **more)


def path_line(y: str, name: str, value: str, line: dict[str, Any], **more: Any) -> dict[str, Any]:
    """A line through the points of a `ClockAxis.path`; `value` is the text at a point."""
    return {
        "type": "scatter",
        "mode": "lines",
        "x": "@path_x",
        "y": y,
        "name": name,
        "line": line,
        "text": "@path_time",
        "hovertemplate": f"%{{text}}<br>{value}<extra>%{{fullData.name}}</extra>",
        **more,
    }


def _swatch(name: str, hatch: str, shown: str | bool) -> dict[str, Any]:
    """A legend entry for bars of one hatch."""
    return {
        "type": "bar",
        "x": [None],
        "y": [None],
        "name": name,
        "visible": shown,
        "marker": _bar(hatch),
    }


def _bar(hatch: str) -> dict[str, Any]:
    return {
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
    }


SLICES = Chart(
    "When is how much traded?",
    "Outlines are the volume expected of everyone else, scaled to hold the same total: a bar above "
    "its outline trades ahead of the volume, one below it behind.",
    (
        {
            "type": "bar",
            "x": "@centre",
            "y": "@pace",
            "width": "@full_width",
            "name": "expected volume",
            "marker": {"color": "rgba(0,0,0,0)", "line": {"color": p.OTHERS, "width": 1.3}},
            "customdata": "@volume",
            "text": "@bucket",
            "textposition": "none",
            "hovertemplate": "%{text}<br>%{customdata:,.0f} shares expected of the others"
            "<extra></extra>",
        },
        {
            "type": "bar",
            "x": "@centre",
            "y": "@shares",
            "width": "@bar_width",
            "name": "slices",
            "showlegend": False,
            "marker": _bar("@hatch"),
            "text": "@bucket",
            "textposition": "none",
            "hovertemplate": "%{text}<br>%{y:,} shares<extra></extra>",
        },
        {
            "type": "scatter",
            "mode": "markers",
            "x": "@centre",
            "y": "@cap",
            "name": "cap",
            "visible": "@has_cap",
            "marker": {
                "symbol": "line-ew",
                "size": "@cap_size",
                "line": {"color": p.TEXT, "width": 2.5},
            },
            "text": "@bucket",
            "hovertemplate": "%{text}<br>at most %{y:,.0f} shares<extra></extra>",
        },
        _swatch("slice", p.FREE, True),
        _swatch("at its cap", p.AT_CAP, "@has_at_cap"),
        _swatch("auction", p.AUCTION, "@has_auction"),
        _swatch("auction at its cap", p.AUCTION_AT_CAP, "@has_auction_at_cap"),
        # Plotly draws the right axis only for a trace that uses it.
        {"type": "scatter", "x": [None], "y": [None], "yaxis": "y2", "showlegend": False},
    ),
    over_time(
        axis("shares a bucket", range="@share_range", fixedrange=True),
        barmode="overlay",
        yaxis2=axis(
            "expected volume",
            range="@volume_range",
            fixedrange=True,
            overlaying="y",
            side="right",
            showgrid=False,
            tickmode="auto",
        ),
    ),
)

REMAINING = Chart(
    "How much is left?",
    "The plan's shares still to trade, beside two simple schedules under the same caps.",
    (
        path_line("@left", "this plan", "%{y:,.0f} shares left", line(p.PLAN, 3)),
        path_line(
            "@left_evenly",
            "evenly timed",
            "%{y:,.0f} shares left",
            line(p.EVEN, 1.6, p.EVEN_DASH),
        ),
        path_line(
            "@left_by_volume",
            "in proportion to volume",
            "%{y:,.0f} shares left",
            line(p.VOLUME, 1.8, p.VOLUME_DASH),
        ),
        {
            "type": "scatter",
            "mode": "markers",
            "x": "@finish_x",
            "y": "@finish",
            "name": "no more than this may be left",
            "visible": "@has_finish",
            "marker": {"symbol": "triangle-down", "size": 11, "color": p.TEXT},
            "hovertemplate": "at most %{y:,.0f} shares left<extra></extra>",
        },
    ),
    over_time(axis("shares still to trade", rangemode="tozero")),
)

COST = Chart(
    "What will it have cost by then?",
    "Expected cost of the slices up to each moment, against the arrival price, and one standard "
    "deviation either side of what price moves up to then can make of it.",
    (
        {
            "type": "scatter",
            "mode": "lines",
            "x": "@band_x",
            "y": "@band",
            "name": "± one standard deviation",
            "fill": "toself",
            "fillcolor": p.BAND,
            "line": {"color": p.PLAN, "width": 0.8, "dash": "3px,2px"},
            "hoverinfo": "skip",
        },
        path_line(
            "@cost",
            "expected cost",
            "%{y:,.2f} bps ± %{customdata:,.1f}",
            line(p.PLAN, 3),
            customdata="@std",
        ),
    ),
    over_time(axis("cost so far, bps", zeroline=True, zerolinecolor=p.OTHERS)),
)

IMBALANCE = Chart(
    "How far is the price pushed?",
    "Upper: displacement of the price. Lower: the imbalance behind it, as a multiple of the "
    "relaxation volume. Above zero the market sees more buyers, below it more sellers.",
    (
        path_line("@moved", "price displacement", "%{y:,.2f} bps", line(p.PLAN, 3), yaxis="y"),
        path_line(
            "@imbalance",
            "imbalance",
            "%{y:,.4f} of the relaxation volume",
            line(p.EVEN, 2.5),
            yaxis="y2",
        ),
    ),
    over_time(
        axis("moved, bps", domain=[0.54, 1], zeroline=True, zerolinecolor=p.OTHERS),
        anchor="y2",
        showlegend=False,
        yaxis2=axis("Z / L", domain=[0, 0.46], zeroline=True, zerolinecolor=p.OTHERS),
    ),
)
