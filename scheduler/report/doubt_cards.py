"""What a plan says of its own doubts: cards of an order, and of all orders together."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime
from typing import Any

from scheduler.report.clock_axis import clock_text, date_text
from scheduler.report.markup import number, percent, table

_MOST_WORLDS = 6


def doubt_cards(row: dict[str, Any]) -> Iterator[str]:
    """Of an order's figures or the total's; nothing where nothing was asked."""
    if "regret_bps" in row.get("worst_of", {}):
        yield _worst(row["worst_of"])
    if "uncertainty" in row:
        yield _draws(row["uncertainty"])


def _worst(row: dict[str, Any]) -> str:
    """The worlds in which one of the two schedules does worst, worst first."""
    mine, plain = row["regret_bps"], row["plain_regret_bps"]
    ranked = sorted(mine, key=lambda name: -max(mine[name], plain[name]))
    rows = [[name, number(mine[name], 2), number(plain[name], 2)] for name in ranked[:_MOST_WORLDS]]
    worst = [number(row[name], 2) for name in ("worst_regret_bps", "plain_worst_regret_bps")]
    rows.append(["worst of all", *worst])
    note = "Regret: cost + price of variance in that world, less the least it could be there. "
    header = ["bps", "this plan", "plain plan"]
    return table("And where the market differs?", header, rows, note + _claim(row))


def _claim(row: dict[str, Any]) -> str:
    """What is known of the worst regret."""
    gap = "" if row["gap"] == 0.0 else f" to {percent(row['gap'], 3)} of it"
    if not row["proven"]:
        return "This plan's worst regret is the least found; a lesser one may exist."
    if row["schedule"] == "robust":
        return f"But for whole lots, no schedule has a lesser worst regret{gap}."
    return f"But for whole lots, the plain plan's worst regret is the least there is{gap}."


def _draws(row: dict[str, Any]) -> str:
    names = {
        "expected_cost_bps": "expected cost",
        "cost_std_bps": "risk (1 st. dev.)",
        "regret_bps": "regret",
    }
    rows = [
        [words, *(number(row[name][part], 2) for part in ("low", "middle", "high"))]
        for name, words in names.items()
        if name in row
    ]
    note = f"{row['draws']} draws of the parameters from their intervals."
    if (moves := row.get("moves")) is not None and moves["at"] is not None:
        at = datetime.fromisoformat(moves["at"])
        note += (
            f" The best schedule for a draw differs from this one by {percent(moves['middle'], 1)} "
            f"of the order at most, 1 time in 20 by more than {percent(moves['high'], 1)}; above "
            f"all around {date_text(at)} {clock_text(at)}."
        )
    header = ["bps", "1 in 20 below", "middle", "1 in 20 above"]
    return table("How sure are the figures?", header, rows, note)
