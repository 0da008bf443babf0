"""An invented desk: orders and market tables from plain numbers, and plans of them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import date
from typing import Any

import numpy as np
import pandas as pd

from scheduler import Plan, Settings, plan
from scheduler.figures import Figures
from scheduler.model.ragged import Array
from scheduler.solve.schedule import Schedule, schedule

DAY = date(2026, 3, 5)
"""A Thursday on which XNYS, XTKS and XHKG are open."""

Row = dict[str, Any]


def task(quantity: float = 20_000, **columns: Any) -> Row:
    """A row of the orders table: a buy of OAKMERE unless told otherwise."""
    row = {"symbol": "OAKMERE", "side": "buy", "quantity": quantity} | columns
    return {"order_id": f"{row['symbol']}-1"} | row


def name(symbol: str = "OAKMERE", **columns: Any) -> Row:
    """A row of the market table: a million shares a day at 50, 2 % a day, on XNYS."""
    usual = {"price": 50.0, "adv": 1e6, "daily_vol": 0.02, "calendar": "XNYS"}
    return {"symbol": symbol} | usual | columns


def planned(
    orders: Row | Sequence[Row], market: Row | Sequence[Row], *, at: str = "09:30", **options: Any
) -> Plan:
    """The plan of these rows; settings of the sections [plan] and [model] by their names."""
    chosen = {
        key: value
        for key, value in options.items()
        if key in _PLAN | _MODEL and not isinstance(value, list)  # finish is an option, too
    }
    settings = settings_of(**chosen)
    given = {"date": DAY, "at": at} | {k: v for k, v in options.items() if k not in chosen}
    return plan(table(orders), table(market), settings=settings, **given)


def settings_of(**values: Any) -> Settings:
    """The defaults with some settings of the sections [plan] and [model] replaced."""
    return (
        Settings()
        .with_values("plan", **{key: value for key, value in values.items() if key in _PLAN})
        .with_values("model", **{key: value for key, value in values.items() if key in _MODEL})
    )


_PLAN, _MODEL = (
    frozenset(getattr(Settings(), section).__dataclass_fields__) for section in ("plan", "model")
)


def slices(result: Plan, order: str = "OAKMERE-1") -> pd.DataFrame:
    """The rows of one order, numbered from 0."""
    rows = result.schedule[result.schedule["order_id"] == order].reset_index(drop=True)
    assert len(rows)
    return rows


def row_of(result: Plan, order: str = "OAKMERE-1") -> dict[str, Any]:
    """The figures of one order."""
    figures: dict[str, Any] = result.summary["orders"][order]
    return figures


def unrounded(result: Plan) -> tuple[Schedule, Figures]:
    """What the plan's whole lots were rounded from, solved anew, with its figures."""
    solved = schedule(result.book.arrays)
    return solved, Figures(result.book.arrays, result.book.charges, solved.shares)


def in_stages(result: Plan, rows: Iterable[float]) -> Array:
    """Values by row of the schedule as values by stage, 0 in closed periods."""
    kind = result.book.kind
    values = np.zeros(len(kind))
    values[kind != 2] = list(rows)
    return values


def random_desk(seed: int, most: int = 4, **columns: Any) -> tuple[list[Row], list[Row]]:
    """Up to `most` orders that their caps let complete, each in a symbol of its own."""
    rng = np.random.default_rng(seed)
    orders, market = [], []
    for number in range(int(rng.integers(1, most + 1))):
        symbol = f"S{number}"
        adv = float(rng.integers(200_000, 5_000_000))
        quantity = max(1.0, np.floor(adv * 10.0 ** rng.uniform(-4.0, -1.2)))
        orders.append(
            task(quantity, symbol=symbol, side=str(rng.choice(["buy", "sell"]))) | columns
        )
        market.append(
            name(
                symbol,
                price=round(float(rng.uniform(2.0, 200.0)), 2),
                adv=adv,
                daily_vol=round(float(rng.uniform(0.005, 0.05)), 4),
                spread_bps=round(float(rng.uniform(0.0, 12.0)), 1),
                profile=str(rng.choice(["flat", "u-shape"])),
                lot_size=int(rng.choice([1, 1, 10])),
            )
        )
    return orders, market


def table(rows: Row | Sequence[Row]) -> pd.DataFrame:
    return pd.DataFrame([rows] if isinstance(rows, dict) else list(rows))
