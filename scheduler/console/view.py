"""What the page shows of a plan, ready for JSON."""

from __future__ import annotations

from html import escape
from typing import Any

import numpy as np

from scheduler.console.desk import Desk
from scheduler.console.places import axis_values, fixed_axis, moments, placed, untied
from scheduler.model.ragged import Array
from scheduler.plan import Plan
from scheduler.report.chart import rounded
from scheduler.report.clock_axis import ClockAxis, clock_text, date_text
from scheduler.report.details import certainty, certificate_words, done_by
from scheduler.report.figures import why_missing
from scheduler.report.frontier import frontiers
from scheduler.report.lines import Lines
from scheduler.report.list_axis import list_axis
from scheduler.report.markup import shares as share_text
from scheduler.rivals import evenly_timed, volume_proportional
from scheduler.sessions import Kind
from scheduler.transition import Transition

_CASES = {"plan": None, "evenly": "evenly_timed", "by_volume": "volume_proportional"}
_SLICE_COLUMNS = {
    "remaining": "remaining",
    "participation": "participation",
    "moved": "displacement_bps",
    "slice_cost": "expected_cost",
    "std_ahead": "cost_std_remaining",
}
_LISTED = 60
NO_ONE_RISK = (
    "Left out: without a risk table a list has no one risk, so no frontier. Choose one order to "
    "see its own, or give exposures and factor_covariance, or returns."
)


def view(desk: Desk, plan: Plan, order: str | None) -> dict[str, Any]:
    """Charts, figures and words of one order of a plan, or of all."""
    shown = _list(desk, plan) if order is None else _order(desk, plan, order)
    return {
        **shown,
        "currency": plan.summary["currency"],
        "moments": moments(fixed_axis(desk, order)),
        "notes": list(plan.notes),
    }


def _order(desk: Desk, plan: Plan, name: str) -> dict[str, Any]:
    order = plan.book.names.index(name)
    row = plan.summary["orders"][name]
    fixed = fixed_axis(desk, name)
    axis = placed(plan.book.grids[order], fixed)
    frame = plan.schedule[plan.schedule["order_id"] == name]
    slices = {str(column): frame[column].to_numpy() for column in frame}
    columns = {key: slices[column].tolist() for key, column in _SLICE_COLUMNS.items()}
    values = {**axis_values(axis, fixed), **Lines(plan).of(order, axis), **columns}
    words = [
        f"{row['side']} {share_text(row['quantity'])} {row['symbol']}",
        *_when(slices, row["side"]),
    ]
    if row["residual"]:
        words.append(f"{share_text(row['residual'])} shares stay undone")
    cases = {key: row if case is None else row[case] for key, case in _CASES.items()}
    return {
        "kind": "order",
        "values": rounded(values),
        "cases": {key: _figures(case, row["notional"]) for key, case in cases.items()},
        "high": 1e4 * float(plan.figures.distribution(order).quantile(0.95)[0]) / row["notional"],
        "words": words,
        "certainty": certainty(row["certificate"]),
        "certificate": list(certificate_words(row["certificate"])),
        "now": _now(plan, order),
    }


def _when(slices: dict[str, Any], side: str) -> list[str]:
    """The first slice, and when half and all of what is traded will be."""
    traded = np.flatnonzero(slices["shares"])
    if not len(traded):
        return ["nothing trades"]
    first = int(traded[0])
    start, kind = slices["start"][first][11:16], slices["kind"][first]
    verb = "buying" if side == "buy" else "selling"
    auction = " auction" if kind == "auction" else ""
    return [
        f"begin by {verb} {share_text(float(slices['shares'][first]))} shares at {start}{auction}",
        f"half by {done_by(slices, 0.5)}",
        f"all by {done_by(slices, 1.0)}",
    ]


def _figures(case: dict[str, Any], notional: float) -> dict[str, float]:
    """Cost, risk and what the plan makes least, in bps and in money."""
    return {
        "cost_bps": case["expected_cost_bps"],
        "cost": case["expected_cost"],
        "risk_bps": case["cost_std_bps"],
        "risk": case["cost_std"],
        "in_all_bps": 1e4 * case["objective"] / notional,
    }


def _now(plan: Plan, order: int) -> dict[str, Any]:
    """The settings in force for one order, wherever they come from."""
    book, arrays = plan.book, plan.book.arrays
    grid, layout = book.grids[order], book.layout
    span = slice(layout.first[order], layout.last[order] + 1)
    continuous = book.kind[span] == Kind.CONTINUOUS
    side = float(book.rows["side"].to_numpy(dtype=float)[order])
    lean = side * arrays.initial[order] / arrays.market.relaxation_volume[order]
    row = plan.summary["orders"][book.names[order]]
    return _with_law(plan, _urgency(row)) | {
        "max_participation": float(book.cap_rate[span][continuous].max())
        if continuous.any()
        else None,
        "start": grid.local_start[0],
        "end": grid.local_end[-1],
        "reading": float(lean),
    }


def _urgency(row: dict[str, Any]) -> float:
    """U, or where the aim is a risk aversion what it comes to: 2 lambda sqrt(Var)."""
    asked = row.get("urgency")
    return float(2.0 * row["risk_aversion"] * row["cost_std"] if asked is None else asked)


def _with_law(plan: Plan, urgency: float | None) -> dict[str, Any]:
    law = plan.book.settings.model.impact_law
    return {"urgency": urgency, "volume": 1.0, "volatility": 1.0, "impact_law": law}


def _list(desk: Desk, plan: Plan) -> dict[str, Any]:
    transition = plan.transition or untied(plan.book)
    fixed = fixed_axis(desk, None)
    axis = placed(list_axis(transition).grid, fixed)
    total, one = plan.summary["total"], plan.transition is not None
    shares = plan.figures.pooled.shares
    schedules = {
        "left": shares,
        "left_evenly": evenly_timed(transition.book),
        "left_by_volume": volume_proportional(transition.book),
    }
    gross = np.abs(transition.value)
    left = {name: gross @ transition.left(given) for name, given in schedules.items()}
    values = {
        **axis_values(axis, fixed),
        **_traded(transition, shares, axis.grid.open),
        **{name: axis.path(float(gross.sum()), money.tolist()) for name, money in left.items()},
        "money_title": escape(plan.summary["currency"]) or "value",
    }
    cases = {key: total if case is None else total[case] for key, case in _CASES.items()}
    figures = _figures if one else _bounds
    certificate = total.get("certificate")
    urgencies = {_urgency(row) for row in plan.summary["orders"].values()}
    urgency = urgencies.pop() if len(urgencies) == 1 else _urgency(total) if one else None
    return {
        "kind": "list",
        "values": rounded(values),
        "cases": {key: figures(case, total["notional"]) for key, case in cases.items()},
        "high": 1e4 * total["quantiles"]["0.95"] / total["notional"] if one else None,
        "words": [f"{total['orders']:,} orders", _list_when(left["left"], axis)],
        "certainty": certainty(certificate) if certificate else "",
        "certificate": list(certificate_words(certificate)) if certificate else [],
        "orders": _orders(plan),
        "now": _with_law(plan, urgency)
        | {
            "max_participation": _common_cap(plan),
            "start": fixed.grid.local_start[0],
            "end": fixed.grid.local_end[-1],
            "reading": None,
        },
    }


def _traded(transition: Transition, shares: Array, open_: Any) -> dict[str, Any]:
    """Value bought and sold in each interval; what is sold below zero."""
    done = 1.0 - transition.left(shares)
    found = {}
    for name, value in (
        ("bought", np.maximum(transition.value, 0.0)),
        ("sold", np.minimum(transition.value, 0.0)),
    ):
        found[name] = np.diff(value @ done, prepend=0.0)[open_].tolist()
    return found


def _list_when(left: Array, axis: ClockAxis) -> str:
    """When half of the list's value will have been traded."""
    done = np.flatnonzero(axis.grid.open & (left <= 0.5 * float(left.max())))
    if not len(done):
        return "half of the value stays undone"
    end = axis.ends(int(done[0]))
    return f"half of the value by {date_text(end)} {clock_text(end)}"


def _bounds(case: dict[str, Any], _notional: float) -> dict[str, float]:
    """Cost, and the risk if orders were independent and if they moved as one."""
    if "cost_std_bps" in case:  # of one order
        return _figures(case, _notional)
    return {
        "cost_bps": case["expected_cost_bps"],
        "cost": case["expected_cost"],
        "risk_bps": case["cost_std_independent_bps"],
        "risk": case["cost_std_independent"],
        "risk_most_bps": case["cost_std_fully_dependent_bps"],
        "risk_most": case["cost_std_fully_dependent"],
    }


def _common_cap(plan: Plan) -> float | None:
    """The cap of all orders, if they have one."""
    found = set(plan.book.cap_rate[plan.book.kind == Kind.CONTINUOUS].tolist())
    return found.pop() if len(found) == 1 else None


def _orders(plan: Plan) -> list[dict[str, Any]]:
    """A line for each of the dearest orders."""
    rows = sorted(plan.summary["orders"].items(), key=lambda item: -item[1]["expected_cost"])
    return [
        {
            "order": name,
            "side": row["side"],
            "symbol": row["symbol"],
            "quantity": row["quantity"],
            "notional": row["notional"],
            "cost_bps": row["expected_cost_bps"],
            "cost": row["expected_cost"],
            "risk_bps": row["cost_std_bps"],
            "part_of_risk": row.get("part_of_risk"),
        }
        for name, row in rows[:_LISTED]
    ]


def frontier(plan: Plan, order: str) -> dict[str, Any]:
    """The frontier of one order, or why there is none."""
    place = plan.book.names.index(order)
    found = frontiers(plan, np.array([place]))[0]
    if found is None:
        return {"values": None, "missing": why_missing(plan, "frontier", place)}
    return {"values": rounded(found), "missing": ""}
