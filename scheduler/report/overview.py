"""The head of the page: what was planned, the totals, notes and settings."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from datetime import date, datetime
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from scheduler.plan import Plan
from scheduler.report.clock_axis import date_text
from scheduler.report.details import bps, money
from scheduler.report.markup import bullets, number, shares, tiles
from scheduler.what_if import WhatIf


def session_text(plan: Plan | WhatIf) -> str:
    """When a plan or a grid is for and when it was made."""
    day = date.fromisoformat(plan.summary["date"])
    words = [f"Session {date_text(datetime.combine(day, datetime.min.time()))} {day.year}"]
    if plan.book.at is not None:
        zone = plan.book.grids[0].timezone
        at = plan.book.at.to_pydatetime().astimezone(ZoneInfo(zone))
        words.append(f"planned as of {date_text(at)} {at:%H:%M} ({zone})")
    if plan.summary["currency"]:
        words.append(f"amounts in {plan.summary['currency']}")
    return " · ".join([*words, f"headrace {plan.summary['version']}"])


def aim_text(plan: Plan) -> str:
    """What was asked for, in numbers with their units."""
    asked = plan.book.settings.plan
    urgency = float(plan.book.arrays.urgency[0])
    if asked.risk_budget is not None:
        text = f"The least cost with a standard deviation of at most {asked.risk_budget:g} bps."
    elif asked.cost_budget is not None:
        text = f"The least risk with an expected cost of at most {asked.cost_budget:g} bps."
    elif asked.risk_aversion is not None:
        unit = plan.summary["currency"] or "unit of currency"
        text = f"Risk aversion {asked.risk_aversion:g} per {unit}: cost + that × variance is least."
    else:
        text = (
            f"Urgency {urgency:g}: {urgency:g} bps of expected cost are paid to shed 1 bp of "
            "standard deviation."
        )
    if plan.transition is not None:
        text += " All orders are planned as one list."
    if "worst_of" in (total := plan.summary["total"]):
        worlds = ", ".join(total["worst_of"]["worlds"])
        text += f" At that price, the worst regret over {worlds} is least."
    return text + (f" At least to be done: {asked.finish}." if asked.finish else "")


def total_tiles(plan: Plan) -> str:
    """The list as a whole."""
    total, ccy = plan.summary["total"], plan.summary["currency"]
    parts = [f"{name} {number(total[name])}" for name in ("impact", "spread", "fees")]
    if total["permanent"]:
        parts.append(f"permanent {number(total['permanent'])}")
    if total["residual_cost"]:
        parts.append(f"what stays undone {number(total['residual_cost'])} apart")
    pairs = [
        ("Orders", number(total["orders"]), ""),
        ("Notional", money(total["notional"], ccy), ""),
        (
            "Expected cost",
            bps(total["expected_cost_bps"]),
            f"{money(total['expected_cost'], ccy)}: {', '.join(parts)}",
        ),
    ]
    if "uncertainty" in total:
        span = total["uncertainty"]["expected_cost_bps"]
        words = f"{number(span['low'], 2)} to {number(span['high'], 2)} bps"
        pairs.append(("9 in 10 draws cost", words, f"of {total['uncertainty']['draws']}"))
    if "cost_std" in total:  # one order, or a list whose risk is known
        pairs.append(("Risk", bps(total["cost_std_bps"]), money(total["cost_std"], ccy)))
        return tiles(pairs)
    for words, key in (
        ("Risk if independent", "cost_std_independent"),
        ("Risk if they move as one", "cost_std_fully_dependent"),
    ):
        pairs.append((words, bps(total[f"{key}_bps"]), f"{money(total[key], ccy)}, a bound"))
    return tiles(pairs)


def order_text(name: str, row: dict[str, Any]) -> str:
    return f"{name}: {row['side']} {shares(row['quantity'])} {row['symbol']}"


def notes_by_order(plan: Plan) -> tuple[list[str], dict[str, list[str]]]:
    """Notes on the list as a whole, and those on each order without its name before them."""
    general: list[str] = []
    special: dict[str, list[str]] = {}
    known = {name: [name] for name in plan.book.names}
    pools = plan.book.arrays.pools
    if pools is not None:  # a pool's notes are each of its orders'
        for pool, name in enumerate(plan.book.pooled.names):
            members = np.flatnonzero(pools.of == pool)
            known[name] = [plan.book.names[order] for order in members]
    for note in plan.notes:
        owner = next((name for name in _prefixes(note) if name in known), None)
        if owner is None:
            general.append(note)
        else:
            for name in known[owner]:
                special.setdefault(name, []).append(note[len(owner) + 2 :])
    return general, special


def _prefixes(note: str) -> Iterator[str]:
    """What may be the name before a note, the longest first: a name may hold a colon itself."""
    at = len(note)
    while (at := note.rfind(": ", 0, at)) >= 0:
        yield note[:at]


def settings_block(plan: Plan | WhatIf) -> str:
    """Every input and setting, folded away."""
    lines = [f"{name}: {source}" for name, source in plan.summary["inputs"].items()]
    for section, values in plan.summary["settings"].items():
        lines += [f"{section}.{key} = {value}" for key, value in values.items() if value != ""]
    return f"<details><summary>Inputs and settings</summary>{bullets(lines)}</details>"


def notes_block(notes: Sequence[str]) -> str:
    """Notes on the list as a whole."""
    return f"<h2>Notes</h2>{bullets(notes)}" if notes else ""
