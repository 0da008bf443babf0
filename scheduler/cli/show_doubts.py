"""What a plan says of its own doubts, in a line or two at the terminal."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any


def doubt_lines(row: dict[str, Any]) -> Iterator[str]:
    """Of an order's figures or the total's; nothing where nothing was asked."""
    if "worst_of" in row:
        yield _worst(row["worst_of"])
    if "uncertainty" in row:
        yield _draws(row["uncertainty"])


def _worst(row: dict[str, Any]) -> str:
    mine, plain = row["worst_regret_bps"], row["plain_worst_regret_bps"]
    if "worst_world" not in row:
        return (
            f"worst regrets add up to {mine:.2f} bps, of the plain schedules to {plain:.2f} bps; "
            f"{row['robust']} orders differ from plain"
        )
    if row["schedule"] == "plain":
        return f"worst regret {mine:.2f} bps ({row['worst_world']}): the plain schedule's is least"
    return (
        f"worst regret {mine:.2f} bps ({row['worst_world']}), of the plain schedule "
        f"{plain:.2f} bps ({row['plain_worst_world']})"
    )


def _draws(row: dict[str, Any]) -> str:
    parts = [f"cost {_span(row['expected_cost_bps'])}"]
    if "cost_std_bps" in row:
        parts.append(f"risk {_span(row['cost_std_bps'])}")
    parts.append(f"regret at most {row['regret_bps']['high']:.2f}")
    words = f"9 in 10 of {row['draws']} draws: {', '.join(parts)} bps"
    if "moves" in row and row["moves"]["at"] is not None:
        moves = row["moves"]
        words += (
            f"; the best schedule is {moves['middle']:.1%} of the order away, 1 time in 20 more "
            f"than {moves['high']:.1%}, most of all at {moves['at'][11:16]}"
        )
    return words


def _span(values: dict[str, float]) -> str:
    return f"{values['low']:.2f} to {values['high']:.2f}"
