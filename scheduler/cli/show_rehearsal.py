"""A rehearsal at the terminal."""

from __future__ import annotations

from typing import Any

from scheduler.cli.show import aligned
from scheduler.rehearse import CASES, Rehearsal


def rehearsal_text(result: Rehearsal) -> str:
    """Each order's promise and what came of it, in the base currency."""
    currency = result.summary["currency"]
    blocks = [_order(name, row, currency) for name, row in result.summary["orders"].items()]
    return "\n\n".join(blocks)


def _order(name: str, row: dict[str, Any], currency: str) -> str:
    header = [f"{name}, {currency}".rstrip(", "), "mean", "st. dev.", "95 %", "99 %"]
    header += ["worst 5 % mean", "above 95 %", "completed"]
    promised = row["promised"]
    rows = [("promised", *_figures(promised), "5.0%", "")]
    cases = {case: words for case, words in CASES.items() if case in row}
    for case, words in cases.items():
        found = row[case]
        above = 1.0 - found["coverage"]["0.95"]["share"]
        rows.append((words, *_figures(found), f"{above:.1%}", f"{found['completed']:.1%}"))
    verdicts = [f"{words}: {row[case]['verdict']}" for case, words in cases.items()]
    return "\n".join((aligned(header, rows), *verdicts))


def _figures(row: dict[str, Any]) -> tuple[str, ...]:
    values = (
        row["mean"],
        row["std"],
        row["quantiles"]["0.95"],
        row["quantiles"]["0.99"],
        row["expected_shortfall_95"],
    )
    return tuple(f"{value:,.0f}" for value in values)
