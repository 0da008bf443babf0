"""Charts of a list planned as one: who is how far, corridors, and where its risk comes from."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line
from scheduler.report.law_charts import DISTRIBUTION
from scheduler.report.time_charts import over_time, path_line

_ZERO = {"zeroline": True, "zerolinecolor": p.OTHERS}
_MONEY = "%{y:,.0f}"

SIDES = Chart(
    "How far is each side?",
    "Share of the value bought and of the value sold so far, of each side's own.",
    tuple(
        path_line(
            f"@{name}",
            words,
            f"%{{y:.1f}} % of the {words}, %{{customdata:,.0f}}",
            line(*style),
            customdata=f"@{name}_money",
            visible=f"@has_{name}",
        )
        for name, words, style in (
            ("bought", "buys", (p.PLAN, 3)),
            ("sold", "sells", (p.EVEN, 2.5, p.EVEN_DASH)),
        )
    ),
    over_time(axis("done, % of the value", range=[-2, 102])),
)

LEFT = Chart(
    "How much is still to trade?",
    "Gross: buys and sells together. Net: buys less sells.",
    (
        path_line("@gross", "gross", _MONEY, line(p.PLAN, 3)),
        path_line("@net", "net", _MONEY, line(p.EVEN, 2.5, p.EVEN_DASH)),
    ),
    over_time(axis("@money_title", **_ZERO)),
)


def several(key: str, count: int, value: str, **more: Any) -> tuple[dict[str, Any], ...]:
    """Lines alike: `@key0`, `@key1` ... of the names `@name0`, `@name1` ..."""
    return tuple(
        path_line(
            f"@{key}{at}",
            f"@name{at}",
            value,
            line(colour, 3 if at == 0 else 2.2, dash),
            legendgroup=str(at),
            **more,
        )
        for at, (colour, dash) in enumerate(p.SERIES[:count])
    )


def currencies(count: int) -> Chart:
    """Progress and cash of each of several currencies."""
    return Chart(
        "How far is each currency?",
        "Upper: share of the value in each currency done so far. Lower: bought less sold in it so "
        "far: above zero it has to be paid for, below it has come in.",
        (
            *several("done", count, "%{y:.1f} % done", yaxis="y"),
            *several("cash", count, _MONEY, yaxis="y2", showlegend=False),
        ),
        over_time(
            axis("done, %", domain=[0.54, 1], range=[-3, 103]),
            anchor="y2",
            yaxis2=axis("@money_title", domain=[0, 0.46], **_ZERO),
        ),
    )


def exposures(count: int) -> Chart:
    """What is still exposed to the factors that carry the most risk."""
    return Chart(
        "Which exposures are left?",
        "What is still to trade times its exposure to each factor, buys less sells: the factors "
        "that carry the most risk, the largest first.",
        several("exposure", count, _MONEY),
        over_time(axis("@money_title", **_ZERO)),
    )


def _beyond(side: str) -> dict[str, Any]:
    """The hatched ground outside a limit."""
    return {
        "type": "scatter",
        "mode": "none",
        "x": f"@{side}_x",
        "y": f"@{side}_y",
        "fill": "toself",
        "fillpattern": {"shape": "/", "fgcolor": p.OTHERS, "bgcolor": "white", "size": 7},
        "showlegend": False,
        "hoverinfo": "skip",
    }


CORRIDOR = Chart(
    "Does it stay in its corridor?",
    "Hatched: outside the corridor, which holds from the end of the first interval on. No limit is "
    "drawn where no schedule could change the level.",
    (
        _beyond("above"),
        _beyond("below"),
        {
            "type": "scatter",
            "mode": "lines",
            "x": "@limit_x",
            "y": "@limit_y",
            "name": "limit",
            "line": line(p.TEXT, 1.6),
            "hovertemplate": f"{_MONEY}<extra>limit</extra>",
        },
        path_line("@level", "level", _MONEY, line(p.PLAN, 3)),
        {
            "type": "scatter",
            "mode": "markers",
            "x": "@touch_x",
            "y": "@touch_y",
            "name": "at a limit",
            "visible": "@has_touch",
            "marker": {
                "symbol": p.PLAN_MARK,
                "size": 9,
                "color": "white",
                "line": {"color": p.PLAN, "width": 2},
            },
            "hoverinfo": "skip",
        },
    ),
    over_time(axis("@money_title", range="@level_range", **_ZERO)),
)


def corridor(words: str) -> Chart:
    """The corridor chart of one measure."""
    return replace(CORRIDOR, question=f"Does {words} stay in its corridor?")


RISK = Chart(
    "Where does the risk come from?",
    "Parts of the variance of the list's cost. Plain bars add up to all of it; hatched ones say "
    "which factors make up the factors' part. One below zero offsets others. Names alone: what no "
    "factor explains. Own trading: the imbalance it makes, and any read.",
    (
        {
            "type": "bar",
            "orientation": "h",
            "x": "@part",
            "y": "@part_at",
            "text": "@part_text",
            "textposition": "outside",
            "textfont": {"size": 11},
            "cliponaxis": False,
            "customdata": "@part_name",
            "marker": {
                "color": p.PLAN,
                "line": {"color": p.PLAN, "width": 1},
                "pattern": {
                    "shape": "@part_hatch",
                    "fillmode": "replace",
                    "fgcolor": p.PLAN,
                    "bgcolor": "white",
                    "size": 6,
                    "solidity": 0.4,
                },
            },
            "showlegend": False,
            "hovertemplate": "%{customdata}: %{x:.2f} %<extra></extra>",
        },
    ),
    layout(
        axis("part of the variance, %", range="@part_range", **_ZERO),
        axis(
            "",
            tickvals="@part_at",
            ticktext="@part_name",
            range="@part_rows",
            showgrid=False,
            ticks="",
            tickfont={"size": 11},
        ),
        bargap=0.25,
    ),
)

RISK_UNTIED = replace(
    RISK,
    reading="Parts of the variance of the list's cost. No risk table was given: the prices of the "
    "orders are taken to move independently. Own trading: the imbalance it makes, and any read.",
)

LIST_COST = replace(DISTRIBUTION, question="What may the list cost in the end?")
