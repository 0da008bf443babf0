"""The rest of a plan at the terminal."""

from __future__ import annotations

from typing import Any

from scheduler.cli.show import aligned, plan_text
from scheduler.replan import Replan

_DETAILED = 5  # orders up to which each one's changes are shown


def replan_text(result: Replan) -> str:
    """Where the orders stand, why the plan changes, and the schedule of the rest."""
    summary = result.summary
    title = (
        f"Session {summary['date']}, planned as of {summary['planned_at']}, the rest as of "
        f"{summary['at']}"
    )
    blocks = [title, progress_lines(summary["orders"])]
    few = len(summary["orders"]) <= _DETAILED
    if few:
        blocks += [_order(name, row) for name, row in summary["orders"].items()]
    if len(summary["orders"]) > 1:
        blocks.append(_changes("all orders, bps of their notional", summary["total"]["changes"]))
    if result.plan is None:
        blocks.append("Nothing is left that can be traded.")
    else:
        blocks.append(plan_text(result.plan))
    return "\n\n".join(blocks)


def progress_lines(orders: dict[str, Any]) -> str:
    """One line an order."""
    header = ["order", "state", "verdict", "planned", "done", "ahead", "chance explains", "left"]
    header += ["cost bps", "planned bps"]
    rows = [
        (
            name,
            row["state"],
            row["verdict"],
            f"{row['planned']:,.0f}",
            f"{row['done']:,.0f}",
            f"{row['ahead']:+,.0f}",
            f"{row['low']:,.0f} to {row['high']:,.0f}",
            f"{row['left']:,.10g}",
            f"{row['expected_cost_bps']:.2f}",
            f"{row['planned_cost_bps']:.2f}",
        )
        for name, row in orders.items()
    ]
    return aligned(header, rows, left=3)


def _order(name: str, row: dict[str, Any]) -> str:
    title = f"{name}: {row['side']} {row['quantity']:,.10g} {row['symbol']}"
    return _changes(title, row["changes"])


def _changes(title: str, changes: list[dict[str, Any]]) -> str:
    """What each change does; levels in the first and the last line."""
    shares = "left" in changes[0]
    header = ["what changes", *(["left", "next hour"] if shares else []), "cost bps", "cost"]
    rows = []
    for place, change in enumerate(changes):
        sign = "+" if 0 < place < len(changes) - 1 else ""
        counts = [f"{change[key]:{sign},.0f}" for key in ("left", "next_hour")] if shares else []
        costs = [f"{change['bps']:{sign}.2f}", f"{change['expected_cost']:{sign},.0f}"]
        rows.append((change["change"], *counts, *costs))
    return f"{title}\n{aligned(header, rows)}"
