"""The summary of a plan: every figure, ready for JSON."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from importlib.metadata import version
from typing import Any

import numpy as np

from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.outcome import (
    brief_figures,
    merge,
    order_figures,
    quantile_figures,
    total_figures,
)
from scheduler.rivals import evenly_timed, other_volumes, under_laws, volume_proportional
from scheduler.solve.schedule import Schedule
from scheduler.solve.slices import Sliced

CAUTION = (
    "Estimates, not advice. Best-execution duties, pre-trade risk controls and local market "
    "rules (participation, short sale, auctions, halts) come first, and a licensed person decides."
)


def summarise(
    book: Book, figures: Figures, sliced: Sliced, *, brief: bool = False
) -> dict[str, Any]:
    """Every figure of a plan; `brief` leaves out quantiles, other laws and other volumes."""
    solved = sliced.schedule
    ideal = Figures(book.arrays, book.charges, solved.shares)
    rivals = {
        "evenly_timed": replace(figures, shares=evenly_timed(book)),
        "volume_proportional": replace(figures, shares=volume_proportional(book)),
    }
    cases = {}
    if not brief:
        cases["second_opinion"] = under_laws(book, figures.shares)
        cases["other_volume"] = other_volumes(book, figures.shares)
    more = {
        "symbol": book.rows["symbol"].tolist(),
        "side": ["buy" if side > 0 else "sell" for side in book.rows["side"]],
        "currency": [book.currency] * len(book.rows),
        "urgency": _urgencies(book),
        "risk_aversion": implied_risk_aversion(book, figures).tolist(),
        "certificate": _certificates(solved, ideal, figures),
        **{name: brief_figures(rival) for name, rival in rivals.items()},
        **{name: _by_order(group) for name, group in cases.items()},
        "delay_cost": _delay_costs(book),
    }
    one = len(figures.pooled.orders) == 1
    rows = merge(order_figures(figures, quantiles=not brief), more)
    return {
        "schema": 1,
        "version": version("headrace"),
        "date": book.date.isoformat(),
        "at": None if book.at is None else book.at.isoformat(),
        "currency": book.currency,
        "caution": CAUTION,
        "total": {
            **total_figures(figures),
            **(quantile_figures(figures.pooled, 0) if one and not brief else {}),
            **{name: total_figures(rival) for name, rival in rivals.items()},
            **{
                name: {case: total_figures(other) for case, other in group.items()}
                for name, group in cases.items()
            },
        },
        "orders": dict(zip(book.names, rows, strict=True)),
        "settings": book.settings.as_dict(),
        "inputs": dict(book.inputs),
        "notes": list(book.notes),
    }


def implied_risk_aversion(book: Book, figures: Figures) -> Array:
    """lambda + U/(2 sqrt Var), 1/currency: what a re-plan keeps. 0 where there is no variance."""
    pooled = figures.by_order(figures.pooled.cost_std)  # a pool has one aim
    std = np.where(pooled > 0.0, pooled, np.inf)
    result: Array = book.arrays.risk_aversion + 0.5 * book.arrays.urgency / std
    return result


def _urgencies(book: Book) -> list[float | None]:
    """U of each order; none where the aim is a risk aversion."""
    pairs = zip(book.arrays.urgency.tolist(), book.arrays.risk_aversion.tolist(), strict=True)
    return [None if risk_aversion else urgency for urgency, risk_aversion in pairs]


def _certificates(solved: Schedule, ideal: Figures, figures: Figures) -> list[dict[str, Any]]:
    before, after = ideal.pooled, figures.pooled
    scale = np.abs(before.objective) + before.cost_std * 1e-9
    gained = (after.objective - before.objective) / np.where(scale > 0.0, scale, 1.0)
    loss = figures.by_order(gained)
    return [
        {
            "status": solved.status[order].name.lower(),
            "meaning": solved.status[order].value,
            "gap": float(solved.gap[order]),
            "kkt_residual": float(solved.kkt_residual[order]),
            "iterations": int(solved.iterations[order]),
            "seconds": float(solved.seconds[order]),
            "rounding_loss": float(loss[order]),
        }
        for order in range(len(loss))
    ]


def _by_order(cases: Mapping[str, Figures]) -> list[dict[str, dict[str, float]]]:
    briefs = {name: brief_figures(figures) for name, figures in cases.items()}
    count = len(next(iter(briefs.values())))
    return [{name: rows[order] for name, rows in briefs.items()} for order in range(count)]


def _delay_costs(book: Book) -> list[float | None]:
    """s (price - arrival_price) Q: what has happened before time zero, never in expected_cost."""
    arrival: Array = book.rows["arrival_price"].to_numpy(dtype=float)
    fx = book.rows["fx"].fillna(1.0).to_numpy(dtype=float)
    cost = book.rows["side"].to_numpy() * book.arrays.quantity * fx
    cost = cost * (book.rows["price"].to_numpy(dtype=float) - arrival)
    return [None if np.isnan(value) else float(value) for value in cost]
