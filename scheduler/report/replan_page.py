"""The report of a re-plan: where orders stand, why the plan changes, what is to come."""

from __future__ import annotations

from typing import Any

import pandas as pd

from scheduler.replan import Replan
from scheduler.report.details import bps, money
from scheduler.report.frame import drawn, framed
from scheduler.report.markup import bare_table, card, number, shares, table, tiles
from scheduler.report.overview import notes_block, order_text
from scheduler.report.replan_charts import changes_chart, progress_chart

_DRAWN = 40  # orders on the page
_LISTED = 200  # orders in its table


def page(result: Replan) -> str:
    """A self-contained HTML page of a re-plan.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    names = list(result.summary["orders"])
    left_out = max(0, len(names) - _DRAWN)
    return framed(
        result.origin,
        {"orders": [_order(result, name) for name in names[:_DRAWN]]},
        heading="The rest of a plan",
        title="Re-plan",
        asked=_asked_text(result),
        above=[_totals(result), notes_block(list(result.notes)), _standing(result)],
        names=names[:_DRAWN],
        left_out=f"{left_out:,} more in progress.csv." if left_out else "",
        settings=result.plan,
    )


def _asked_text(result: Replan) -> str:
    zone = result.origin.book.grids[0].timezone
    at = pd.Timestamp(result.summary["at"]).tz_convert(zone)
    rest = (
        "nothing is left that can be traded"
        if result.plan is None
        else "the schedule of the rest, order by order, is in report.html beside this page"
    )
    return f"The rest as of {at:%H:%M} on {at:%Y-%m-%d} ({zone}); {rest}."


def _totals(result: Replan) -> str:
    total, ccy = result.summary["total"], result.summary["currency"]
    first, now = total["changes"][0], total["changes"][-1]
    pairs = [
        ("Orders", number(total["orders"]), f"{number(total['notional'])} {ccy} in all"),
        ("Cost as planned", bps(first["bps"]), money(first["expected_cost"], ccy)),
        ("Cost expected now", bps(now["bps"]), money(now["expected_cost"], ccy)),
        ("Behind", number(total["behind"]), "orders, by more than chance explains"),
        ("Ahead", number(total["ahead"]), "orders, by more than chance explains"),
    ]
    return tiles(pairs)


def _standing(result: Replan) -> str:
    header = [
        "order",
        "state",
        "against the plan",
        "planned",
        "done",
        "left",
        "cost, bps",
        "planned",
    ]
    rows = [
        [
            name,
            row["state"],
            row["verdict"],
            number(row["planned"]),
            shares(row["done"]),
            shares(row["left"]),
            number(row["expected_cost_bps"], 2),
            number(row["planned_cost_bps"], 2),
        ]
        for name, row in list(result.summary["orders"].items())[:_LISTED]
    ]
    return card("Where do the orders stand?", bare_table(header, rows), wide=True)


def _order(result: Replan, name: str) -> dict[str, Any]:
    row, origin = result.summary["orders"][name], result.origin
    charts = [changes_chart(row["changes"])]
    if name in origin.book.names:
        grid = origin.book.grids[origin.book.names.index(name)]
        fills = result.fills[result.fills["order_id"] == name]
        rest = None if result.plan is None else _rows(result.plan.schedule, name)
        at = pd.Timestamp(result.summary["at"])
        slices = _rows(origin.schedule, name)
        charts.insert(0, progress_chart(grid, slices, fills, rest, row, at))
    return {
        "title": order_text(name, row),
        "tiles": _tiles(row, result.summary["currency"]),
        "cards": _changes(row["changes"]),
        "charts": drawn(charts),
    }


def _rows(schedule: pd.DataFrame, name: str) -> pd.DataFrame:
    return schedule[schedule["order_id"] == name]


def _tiles(row: dict[str, Any], ccy: str) -> str:
    between = f"chance: {number(row['low'])} to {number(row['high'])}"
    return tiles(
        [
            ("Done", shares(row["done"]), f"at {number(row['average_price'], 4)} on average"),
            ("Planned by now", number(row["planned"]), between),
            ("Left", shares(row["left"]), row["state"]),
            ("Cost as planned", bps(row["planned_cost_bps"]), money(row["planned_cost"], ccy)),
            ("Cost expected now", bps(row["expected_cost_bps"]), money(row["expected_cost"], ccy)),
            ("Risk of the rest", money(row["cost_std"], ccy), "1 st. dev."),
        ]
    )


def _changes(changes: list[dict[str, Any]]) -> str:
    header = ["what changes", "shares left", "next hour", "cost, bps", "cost"]
    rows = [
        [
            change["change"],
            number(change["left"]),
            number(change["next_hour"]),
            number(change["bps"], 2),
            number(change["expected_cost"]),
        ]
        for change in changes
    ]
    note = (
        "Levels in the first and the last row, differences between them: each change added in turn "
        "and the rest planned again, so that they add up."
    )
    return table("Why does the plan change?", header, rows, note, wide=True)
