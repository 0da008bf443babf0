"""The charts of a re-plan: what was planned, what is done, what is to come."""

from __future__ import annotations

from datetime import datetime
from typing import Any

import numpy as np
import pandas as pd

from scheduler.report import palette as p
from scheduler.report.chart import Chart, axis, layout, line
from scheduler.report.clock_axis import ClockAxis, clock_text, date_text
from scheduler.sessions import Grid

_TICKS = 6


def progress_chart(
    grid: Grid,
    slices: pd.DataFrame,
    fills: pd.DataFrame,
    rest: pd.DataFrame | None,
    row: dict[str, Any],
    at: pd.Timestamp,
) -> Chart:
    """Cumulative shares over the plan's clock: planned, done, the rest, and the band at `at`.

    slices, rest : rows of one order of the two schedules. fills : instant (ns), quantity.
    """
    clock = ClockAxis.of(grid)
    planned = ([0.0, *_at(clock, _instants(slices["end"]))], [0, *slices["cumulative"].tolist()])
    done = fills["quantity"].cumsum().tolist()
    now = float(_at(clock, np.array([at.value]))[0])
    stepped = ([0.0, *_at(clock, fills["instant"].to_numpy(dtype=np.int64)), now], [0, *done])
    stepped[1].append(stepped[1][-1])
    traces = [
        _line("planned", *planned, line(p.OTHERS, 2, p.EVEN_DASH)),
        _line("done", *stepped, {**line(p.TEXT, 2), "shape": "hv"}),
    ]
    if rest is not None and len(rest):
        ends = _at(clock, _instants(rest["end"]))
        total = (rest["cumulative"] + row["done"]).tolist()
        traces.append(_line("the rest", [now, *ends], [row["done"], *total], line(p.PLAN, 3)))
    traces.append(_band(now, row))
    marks = _ticks(clock)
    return Chart(
        "Where does the order stand, and how does it go on?",
        "Shares done over the trading day. The bar is what chance leaves of the plan by now: 95 % "
        "of what would be done if slices kept their planned share of the volume as it comes.",
        tuple(traces),
        layout(
            axis("time", tickvals=[x for x, _ in marks], ticktext=[text for _, text in marks]),
            axis("shares done", rangemode="tozero"),
        ),
    )


def changes_chart(changes: list[dict[str, Any]]) -> Chart | None:
    """What each change adds to the cost; None where there is only one."""
    between = changes[1:-1]
    if len(between) < 2:
        return None
    return Chart(
        "What moves the cost of the whole?",
        "Each change added in turn, and the rest planned again; from the plan to now.",
        (
            {
                "type": "waterfall",
                "x": [change["change"] for change in changes],
                "y": [change["bps"] for change in changes],
                "measure": ["absolute", *["relative"] * len(between), "total"],
                "increasing": {"marker": {"color": p.EVEN}},
                "decreasing": {"marker": {"color": p.VOLUME}},
                "totals": {"marker": {"color": p.PLAN}},
                "hovertemplate": "%{y:+.2f} bps<extra></extra>",
            },
        ),
        layout(axis("", type="category"), axis("bps of the whole order")),
    )


def _line(name: str, x: list[Any], y: list[Any], style: dict[str, Any]) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines",
        "x": x,
        "y": y,
        "name": name,
        "line": style,
        "hovertemplate": "%{y:,.0f} shares<extra>%{fullData.name}</extra>",
    }


def _band(now: float, row: dict[str, Any]) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "markers",
        "x": [now],
        "y": [row["planned"]],
        "name": "what chance explains",
        "marker": {"color": p.OTHERS, "symbol": p.PLAN_MARK, "size": 9},
        "error_y": {
            "type": "data",
            "symmetric": False,
            "array": [row["high"] - row["planned"]],
            "arrayminus": [row["planned"] - row["low"]],
            "color": p.OTHERS,
            "width": 8,
        },
        "hovertemplate": "planned by now: %{y:,.0f}<extra></extra>",
    }


def _instants(times: pd.Series[str]) -> np.ndarray[Any, np.dtype[np.int64]]:
    return np.array([pd.Timestamp(text).value for text in times], dtype=np.int64)


def _at(clock: ClockAxis, instants: np.ndarray[Any, np.dtype[np.int64]]) -> list[float]:
    """Positions of instants on the axis."""
    begin, end = (getattr(clock.grid, name).astype(np.int64) for name in ("start", "end"))
    stage = np.clip(np.searchsorted(end, instants), 0, len(end) - 1)
    length = np.maximum(end - begin, 1)[stage]
    part = np.clip((instants - begin[stage]) / length, 0.0, 1.0)
    part = np.where(clock.grid.auction[stage], 1.0, part)
    positions: list[float] = (clock.left[stage] + part * (clock.right - clock.left)[stage]).tolist()
    return positions


def _ticks(clock: ClockAxis) -> list[tuple[float, str]]:
    """A few stages' starts, with the day where there are several."""
    trading = np.flatnonzero(clock.grid.open & ~clock.grid.auction)
    trading = trading if len(trading) else np.flatnonzero(clock.grid.open)
    chosen = trading[:: max(1, len(trading) // _TICKS)].tolist()
    several = int(clock.grid.session.max()) > 0

    def text(moment: datetime) -> str:
        return f"{date_text(moment)} {clock_text(moment)}" if several else clock_text(moment)

    return [(float(clock.left[stage]), text(clock.starts(stage))) for stage in chosen]
