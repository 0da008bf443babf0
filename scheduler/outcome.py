"""From arrays back to labels: the slice schedule and the summary of a plan."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from scheduler.figures import QUANTILES, Figures
from scheduler.intake import Book
from scheduler.model.impact import displacement
from scheduler.model.ragged import Array
from scheduler.model.state import imbalance
from scheduler.sessions import Kind

_KIND_NAMES = np.array([kind.name.lower() for kind in sorted(Kind)])


def schedule_frame(book: Book, figures: Figures) -> pd.DataFrame:
    """One row an order and bucket; closed periods are left out.

    `imbalance` is Z/L and `displacement_bps` the price displacement, both signed as the market
    sees them (+ is more buyers) and at the bucket's end; `expected_cost` is the bucket's own.
    """
    layout, owner = book.layout, book.layout.owner
    orders, shares = book.arrays, figures.shares
    _, after = imbalance(layout, orders.stages.theta, figures.flow, orders.initial)
    side = book.rows["side"].to_numpy(dtype=float)[owner]
    moved = displacement(orders.market.take(owner), after)
    cumulative = layout.cumsum(shares)
    volume = np.concatenate([grid.volume for grid in book.grids]) * orders.market.adv[owner]
    total = figures.flow + volume
    frame = pd.DataFrame(
        {
            "order_id": book.rows["order_id"].to_numpy()[owner],
            "symbol": book.rows["symbol"].to_numpy()[owner],
            "side": np.where(side > 0.0, "buy", "sell"),
            "bucket": 0,
            "kind": _KIND_NAMES[book.kind],
            "start": [text for grid in book.grids for text in grid.local_start],
            "end": [text for grid in book.grids for text in grid.local_end],
            "expected_volume": volume,
            "shares": _whole(shares),
            "cumulative": _whole(cumulative),
            "remaining": _whole(np.maximum(orders.quantity[owner] - cumulative, 0.0)),
            "participation": shares / np.where(total > 0.0, total, 1.0),
            "imbalance": side * after / orders.market.relaxation_volume[owner],
            "displacement_bps": 1e4 * side * moved,
            "expected_cost": figures.stage_cost,
            "cost_std_remaining": figures.stage_std_remaining,
        }
    )
    frame = frame[pd.Series(book.kind != Kind.CLOSED)].reset_index(drop=True)
    frame["bucket"] = frame.groupby("order_id", sort=False).cumcount() + 1
    return frame


def _whole(shares: Array) -> Array | np.ndarray[Any, np.dtype[np.int64]]:
    """Share counts as whole numbers where all of them are; else to 1e-9 of a share."""
    rounded = np.round(shares, 9)
    return rounded.astype(np.int64) if (rounded == np.round(rounded)).all() else rounded


def order_figures(figures: Figures, *, quantiles: bool = True) -> list[dict[str, Any]]:
    """Every figure of each order, base currency; bps of what trades for cost, else of all."""
    columns = {
        "expected_cost": figures.expected_cost,
        "impact": figures.impact,
        "spread": figures.spread,
        "fees": figures.fees,
        "permanent": figures.permanent,
        "cost_std": figures.cost_std,
        "objective": figures.objective,
    }
    result = []
    for order, notional in enumerate(figures.notional):
        row: dict[str, Any] = {
            "quantity": figures.orders.quantity[order],
            "notional": notional,
            "expected_cost_bps": float(figures.cost_bps[order]),
            "cost_std_bps": 1e4 * figures.cost_std[order] / notional,
        }
        row |= {name: float(values[order]) for name, values in columns.items()}
        row["residual"] = figures.residual[order]
        row["residual_cost"] = figures.residual_cost[order]
        row |= quantile_figures(figures, order) if quantiles else {}
        result.append({name: _plain(value) for name, value in row.items()})
    return result


def quantile_figures(figures: Figures, order: int) -> dict[str, Any]:
    """Quantiles of one order's cost, and its mean in the dearest 5 %."""
    values = figures.quantiles[:, order].tolist()
    named = {f"{p:g}": value for p, value in zip(QUANTILES, values[:-1], strict=True)}
    return {"quantiles": named, "expected_shortfall_95": values[-1]}


def total_figures(figures: Figures) -> dict[str, Any]:
    """The list as a whole; `objective` adds up its orders'.

    Its risk, and so its quantiles, are not known without a risk table: two bounds are given.
    """
    notional = float(figures.notional.sum())
    cost = float(figures.expected_cost.sum())
    traded = float((figures.traded * figures.orders.market.price).sum())
    pooled = figures.pooled
    std = pooled.cost_std
    result: dict[str, Any] = {
        "orders": len(figures.orders),
        "notional": notional,
        "expected_cost": cost,
        "expected_cost_bps": 1e4 * cost / traded if traded else 0.0,
        "residual_cost": float(figures.residual_cost.sum()),
        "objective": float(pooled.objective.sum()),
    }
    for name in ("impact", "spread", "fees", "permanent"):
        result[name] = float(getattr(figures, name).sum())
    if len(std) == 1:
        result["cost_std"] = float(std[0])
        result["cost_std_bps"] = 1e4 * float(std[0]) / notional
        return result
    for name, value in (
        ("cost_std_independent", float(np.sqrt((std**2).sum()))),
        ("cost_std_fully_dependent", float(std.sum())),
    ):
        result[name] = value
        result[f"{name}_bps"] = 1e4 * value / notional
    return result


def brief_figures(figures: Figures) -> list[dict[str, float]]:
    """The few figures by which schedules are compared."""
    notional = figures.notional
    rows = zip(
        figures.expected_cost,
        figures.cost_bps,
        figures.cost_std,
        1e4 * figures.cost_std / notional,
        figures.objective,
        figures.residual,
        figures.residual_cost,
        strict=True,
    )
    names = (
        "expected_cost",
        "expected_cost_bps",
        "cost_std",
        "cost_std_bps",
        "objective",
        "residual",
        "residual_cost",
    )
    return [dict(zip(names, map(float, row), strict=True)) for row in rows]


def merge(rows: list[dict[str, Any]], more: Mapping[str, list[Any]]) -> list[dict[str, Any]]:
    """Each row with an entry of every list added under its name."""
    return [
        {**row, **{name: values[order] for name, values in more.items()}}
        for order, row in enumerate(rows)
    ]


def _plain(value: Any) -> Any:
    return float(value) if isinstance(value, np.floating) else value
