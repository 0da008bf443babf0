"""The figures of a list planned as one, in words and tables, as HTML."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array
from scheduler.plan import Plan
from scheduler.report.clock_axis import clock_text, date_text
from scheduler.report.details import (
    bps,
    certainty,
    certificate_words,
    money,
    parts_card,
    quantiles_card,
)
from scheduler.report.list_drawn import measures
from scheduler.report.list_lines import ListLines
from scheduler.report.list_parts import Parts, half
from scheduler.report.markup import MISSING, bullets, card, counted, number, percent, table, tiles

_GROUPS_LISTED = 30


def list_tiles(lines: ListLines, parts: Parts) -> str:
    """The figures asked for first."""
    plan = lines.plan
    total, ccy = plan.summary["total"], plan.summary["currency"]
    buys = int((plan.book.rows["side"] > 0).sum())
    sides = f"{counted(buys, 'buy')}, {counted(total['orders'] - buys, 'sell')}"
    split, quantile = total["risk_split"], total["quantiles"]["0.95"]
    certificate = total["certificate"]
    pairs = [
        ("Orders", number(total["orders"]), sides),
        ("Value", money(total["notional"], ccy), _net_words(plan)),
        ("Expected cost", bps(total["expected_cost_bps"]), money(total["expected_cost"], ccy)),
        ("Risk (1 st. dev.)", bps(total["cost_std_bps"]), money(total["cost_std"], ccy)),
        _split(lines, split),
        ("1 time in 20 dearer than", bps(1e4 * quantile / total["notional"]), money(quantile, ccy)),
        ("Half done by", _half_done(lines), "half of the value"),
        (
            "Half of the cost",
            counted(half(parts.cost), "order"),
            f"half of the risk: {counted(half(parts.risk), 'order')}",
        ),
        ("Optimum", certainty(certificate), f"in {certificate['seconds']:.1f} s"),
    ]
    return tiles(pairs)


def list_cards(lines: ListLines, parts: Parts) -> str:
    """Tables below the list's charts."""
    plan = lines.plan
    delays = [row["delay_cost"] for row in plan.summary["orders"].values()]
    known = [value for value in delays if value is not None]
    row = plan.summary["total"] | {
        "currency": plan.summary["currency"],
        "residual": 0.0,
        "delay_cost": sum(known) if known else None,
    }
    cards = [parts_card(row), quantiles_card(row), _rivals(row)]
    cards.append(card("How sure is the optimum?", bullets(_sure(row["certificate"]))))
    if corridors := measures(lines):
        cards.append(_corridors(lines, corridors, row))
    cards.append(_breakdown(plan, parts))
    return "".join(cards)


def _split(lines: ListLines, split: dict[str, Any]) -> tuple[str, str, str]:
    names, own = percent(split["specific"], 0), percent(split["own_imbalance"], 0)
    if lines.transition.risk is None:
        return "Of its variance", f"{names} names", f"taken as independent; {own} own trading"
    factors = percent(split["factors"], 0)
    return "Of its variance", f"{factors} factors", f"{names} names alone, {own} own trading"


def _net_words(plan: Plan) -> str:
    assert plan.transition is not None
    net = float(plan.transition.value.sum())
    return f"net {'buy' if net >= 0.0 else 'sell'} {number(abs(net))}"


def _half_done(lines: ListLines) -> str:
    at = int((lines.column("gross") > 0.5 * lines.gross).sum())
    end = lines.axis.ends(min(at, len(lines.axis.right) - 1))
    return f"{date_text(end)} {clock_text(end)}"


def _sure(certificate: dict[str, Any]) -> Iterator[str]:
    yield from certificate_words(certificate)
    if certificate["names_not_convex"]:
        yield f"{certificate['names_not_convex']} orders are not convex on their own."


def _rivals(row: dict[str, Any]) -> str:
    cases = {
        "this plan": row,
        "evenly timed": row["evenly_timed"],
        "in proportion to volume": row["volume_proportional"],
    }
    excess = {
        name: max(case["corridor_excess"].values(), default=0.0) for name, case in cases.items()
    }
    rows = [
        [
            name,
            number(case["expected_cost_bps"], 2),
            number(case["cost_std_bps"], 2),
            number(1e4 * case["objective"] / row["notional"], 2),
            *([number(excess[name])] if row["corridor_excess"] else []),
        ]
        for name, case in cases.items()
    ]
    header = ["bps", "cost", "risk", "in all"]
    note = "In all: what the plan makes least, cost + the price of risk."
    if row["corridor_excess"]:
        header.append(f"beyond a corridor, {row['currency']}".rstrip(", "))
        note += " A simpler schedule keeps the caps, but no corridor. Whole lots may take a plan "
        note += "past a limit by less than a lot or two."
    return table("Do simpler schedules do as well?", header, rows, note)


def _corridors(lines: ListLines, corridors: list[str], row: dict[str, Any]) -> str:
    rows = []
    for measure in corridors:
        level, touch = lines.column(measure), lines.touching(measure)
        lower, upper = lines.bounds(measure)
        rows.append(
            [
                measure,
                _tightest(lower, max),
                number(level.min()),
                number(level.max()),
                _tightest(upper, min),
                f"{touch.sum()} of {len(touch)}",
                number(row["corridor_excess"][measure]),
            ]
        )
    header = ["", "lower", "least", "most", "upper", "times at a limit", "beyond it"]
    note = "Limits are the tightest of the day. Beyond: by rounding to whole lots, or softened."
    return table("Where do the corridors bind?", header, rows, note, wide=True)


def _tightest(bound: Array, pick: Any) -> str:
    given = bound[np.isfinite(bound)]
    return number(float(pick(given))) if len(given) else MISSING


def _breakdown(plan: Plan, parts: Parts) -> str:
    """Cost and risk by side, currency and group."""
    cost, size = plan.figures.expected_cost, plan.figures.notional
    rows = [
        [
            name,
            number(mine.sum()),
            number(size[mine].sum()),
            number(1e4 * cost[mine].sum() / size[mine].sum(), 2),
            percent(parts.cost[mine].sum()),
            percent(parts.risk[mine].sum()),
        ]
        for name, mine in _classes(plan)
        if mine.any()
    ]
    header = ["", "orders", "value", "cost, bps", "of the cost", "of the risk"]
    title = "Which part of the list costs what?"
    note = "Parts of the risk add up; one below zero offsets others."
    return table(title, header, rows, note, wide=True)


def _classes(plan: Plan) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    book = plan.book
    side = book.rows["side"].to_numpy(dtype=float)
    yield "buys", side > 0.0
    yield "sells", side < 0.0
    for column, before in (("currency", ""), ("group", "group ")):
        labels = book.rows[column]
        names = labels.dropna().value_counts().index[:_GROUPS_LISTED].tolist()
        if len(names) > 1:
            yield from ((f"{before}{name}", (labels == name).to_numpy()) for name in sorted(names))
