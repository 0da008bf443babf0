"""The figures of one order in words and tables, as HTML."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from datetime import datetime
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from scheduler.report.clock_axis import clock_text, date_text
from scheduler.report.doubt_cards import doubt_cards
from scheduler.report.markup import MISSING, bullets, card, number, percent, shares, table, tiles

Slices: TypeAlias = Mapping[str, NDArray[Any]]
"""Columns of an order's slice schedule."""

_PARTS = ("impact", "spread", "fees", "permanent")
_VOLUMES = {
    "half_by_clock": "half of it, slices by the clock",
    "half_by_volume": "half of it, slices follow it",
    "double_by_clock": "double, slices by the clock",
    "double_by_volume": "double, slices follow it",
}


def order_tiles(
    row: dict[str, Any], slices: Slices, part: tuple[float, float] | None = None
) -> str:
    """The figures a trader asks for first; `part` of a list's cost and risk, if planned in one."""
    ccy = row["currency"]
    sent = np.count_nonzero(slices["shares"])
    busiest = float(slices["participation"].max())
    return tiles(
        [
            ("To trade", shares(row["quantity"]), money(row["notional"], ccy)),
            _urgency(row) if part is None else _part(*part),
            ("Expected cost", bps(row["expected_cost_bps"]), money(row["expected_cost"], ccy)),
            (
                "Risk (1 st. dev.)" if part is None else "Risk alone (1 st. dev.)",
                bps(row["cost_std_bps"]),
                money(row["cost_std"], ccy),
            ),
            (
                "1 time in 20 dearer than",
                bps(1e4 * row["quantiles"]["0.95"] / row["notional"]),
                money(row["quantiles"]["0.95"], ccy),
            ),
            (
                "Half done by",
                done_by(slices, 0.5),
                f"{sent} slices, last {done_by(slices, 1.0)}",
            ),
            ("Share of volume", f"{busiest:.1%}", "own over total, at most"),
        ]
    )


def _urgency(row: dict[str, Any]) -> tuple[str, str, str]:
    urgency = MISSING if row["urgency"] is None else f"{row['urgency']:.4g}"
    unit = row["currency"] or "unit of currency"
    return "Urgency", urgency, f"λ {row['risk_aversion']:.3g} per {unit}"


def _part(cost: float, risk: float) -> tuple[str, str, str]:
    return "Of the list’s cost", percent(cost), f"of its risk {percent(risk)}"


def order_cards(row: dict[str, Any], notes: Sequence[str], *, together: bool = False) -> str:
    """Tables and words that stand below an order's charts."""
    cards = [parts_card(row), quantiles_card(row), _rivals(row, together)]
    cards += [*doubt_cards(row), _laws(row), _volumes(row)]
    cards.append(card("How sure is the optimum?", bullets(certificate_words(row["certificate"]))))
    if notes:
        cards.append(card("Notes on this order", bullets(notes)))
    return "".join(cards)


def certainty(certificate: dict[str, Any]) -> str:
    """The certificate in a word or two."""
    if certificate["status"] == "bounded":
        return f"within {100 * certificate['gap']:.2g} %"
    return str(certificate["status"])


def certificate_words(certificate: dict[str, Any]) -> Iterator[str]:
    """The certificate in words."""
    yield f"{certificate['status'].capitalize()}: {certificate['meaning']}."
    if certificate["status"] != "local":
        yield f"Gap {certificate['gap']:.1e} of impact and price of risk."
    yield f"Conditions of an optimum met to {certificate['kkt_residual']:.1e}."
    yield f"Whole lots change the objective by {number(100 * certificate['rounding_loss'], 4)} %."
    yield f"{certificate['iterations']} iterations, {1e3 * certificate['seconds']:.1f} ms."


def bps(value: float | None) -> str:
    return f"{number(value, 2)} bps"


def money(value: float | None, currency: str) -> str:
    return f"{number(value)} {currency}".rstrip()


def done_by(slices: Slices, fraction: float) -> str:
    """When a fraction of what the plan trades is done: the end of that bucket."""
    traded = slices["cumulative"].astype(float)
    if not traded[-1]:
        return MISSING
    at = int((traded < fraction * traded[-1] * (1.0 - 1e-12)).sum())
    end = datetime.fromisoformat(slices["end"][at])
    dated = slices["start"][0][:10] != slices["end"][-1][:10]
    return f"{date_text(end)} {clock_text(end)}" if dated else clock_text(end)


def _both(row: dict[str, Any], value: float | None) -> list[str]:
    """An amount in bps of the order and in currency."""
    part = None if value is None else 1e4 * value / row["notional"]
    return [number(part, 2), number(value)]


def parts_card(row: dict[str, Any]) -> str:
    rows = [[name, *_both(row, row[name])] for name in _PARTS if name != "permanent" or row[name]]
    rows.append(["expected cost", *_both(row, row["expected_cost"])])
    apart = []
    if row["residual"]:
        rows.append(["what stays undone, as one block", *_both(row, row["residual_cost"])])
        apart.append(f"{shares(row['residual'])} shares stay undone; their price is kept apart.")
    if row["delay_cost"] is not None:
        rows.append(["delay since the benchmark", *_both(row, row["delay_cost"])])
        apart.append("Delay lies before the plan begins and is in no other figure.")
    header = ["", "bps", row["currency"]]
    return table("What does the cost consist of?", header, rows, " ".join(apart))


def quantiles_card(row: dict[str, Any]) -> str:
    rows = [[f"{100 * float(p):g} %", *_both(row, value)] for p, value in row["quantiles"].items()]
    rows.append(["mean of the dearest 5 %", *_both(row, row["expected_shortfall_95"])])
    header = ["chance of staying below", "bps", row["currency"]]
    return table("What may it cost?", header, rows)


def _case(row: dict[str, Any], name: str, case: dict[str, Any]) -> list[str]:
    objective = 1e4 * case["objective"] / row["notional"]
    figures = (case["expected_cost_bps"], case["cost_std_bps"], objective)
    return [name, *(number(value, 2) for value in figures)]


def _rivals(row: dict[str, Any], together: bool) -> str:
    robust = row.get("worst_of", {}).get("schedule") == "robust"
    cases = {
        "this plan": row,
        **({"plain plan": row["worst_of"]["plain"]} if robust else {}),
        "evenly timed": row["evenly_timed"],
        "in proportion to volume": row["volume_proportional"],
    }
    header = ["bps", "cost", "risk", "in all"]
    rows = [_case(row, name, case) for name, case in cases.items()]
    price = "urgency × risk" if row["urgency"] is not None else "risk aversion × variance"
    note = f"In all: what {'a plain' if robust else 'the'} plan makes least, cost + {price}."
    if together:
        note = (
            f"In all: cost + {price} of this order alone. The plan makes the list's least, not "
            "each order's: an order may give a little for the corridors and the others' risk."
        )
    return table("Do simpler schedules do as well?", header, rows, note)


def _laws(row: dict[str, Any]) -> str:
    header = ["bps", "cost", "risk", "in all"]
    rows = [_case(row, name, case) for name, case in row["second_opinion"].items()]
    note = "The same slices, priced by the other published laws of impact."
    return table("What do other laws say?", header, rows, note)


def _volumes(row: dict[str, Any]) -> str:
    header = ["volume", "cost, bps", "risk, bps", "shares undone", "their price, bps"]
    rows = [
        [
            words,
            number(case["expected_cost_bps"], 2),
            number(case["cost_std_bps"], 2),
            shares(round(case["residual"])),
            number(1e4 * case["residual_cost"] / row["notional"], 2),
        ]
        for name, words in _VOLUMES.items()
        for case in [row["other_volume"][name]]
    ]
    note = "What stays undone is priced as one block at the end, apart from the cost."
    return table("And if the volume differs?", header, rows, note)
