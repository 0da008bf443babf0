"""The progress table: where each order stands against its plan, and what the whole will cost."""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler.model.ragged import Array
from scheduler.rest.attribution import NOW, PLAN
from scheduler.rest.progress import band, over_by, verdict
from scheduler.rest.remaining import joined_rows
from scheduler.rest.solved import Given, Origin, Rest
from scheduler.rest.whole import arrival_prices, average_prices

GOING, COMPLETE, CANCELLED, OVER = "going", "complete", "cancelled", "window over"


def progress_frame(origin: Origin, given: Given, rest: Rest, table: pd.DataFrame) -> pd.DataFrame:
    """A row an order of the plan and of the orders given now."""
    names = list(dict.fromkeys(table["order_id"]))
    rows = _rows(origin, given).loc[names]
    done = given.fills.by_order(names)
    planned, low, high = _due(origin, names)
    levels = table.set_index(["change", "order_id"])
    costs = {name: levels.loc[name]["expected_cost"].reindex(names) for name in (PLAN, NOW)}
    price = rows["symbol"].map(arrival_prices(origin, given)).to_numpy(dtype=float)
    quantity = rows["quantity"].to_numpy(dtype=float)
    notional = price * quantity
    left = levels.loc[NOW]["left"].reindex(names).to_numpy(dtype=float)
    return pd.DataFrame(
        {
            "order_id": names,
            "symbol": rows["symbol"].to_numpy(),
            "side": np.where(rows["side"].to_numpy() > 0, "buy", "sell"),
            "quantity": quantity,
            "planned": planned,
            "done": done,
            "ahead": done - planned,
            "low": low,
            "high": high,
            "verdict": [verdict(*each) for each in zip(done, low, high, strict=True)],
            "state": _states(names, rest),
            "left": left,
            "average_price": average_prices(given.fills, names),
            "imbalance": _imbalance(rows, rest),
            "notional": notional,
            "planned_cost": costs[PLAN].to_numpy(dtype=float),
            "expected_cost": costs[NOW].to_numpy(dtype=float),
            "planned_cost_bps": 1e4 * costs[PLAN].to_numpy(dtype=float) / notional,
            "expected_cost_bps": 1e4 * costs[NOW].to_numpy(dtype=float) / notional,
            "cost_std": _std(names, rest),
        }
    )


def _rows(origin: Origin, given: Given) -> pd.DataFrame:
    """Orders in full by order_id: as the plan has them, and those it does not have."""
    book = origin.plan.book.rows
    both = pd.concat([book, joined_rows(given.inputs)], ignore_index=True)
    return both.drop_duplicates("order_id").set_index("order_id")


def _due(origin: Origin, names: list[str]) -> tuple[Array, Array, Array]:
    """Shares that the plan has due by now, and the band of what chance leaves of them."""
    book, figures = origin.plan.book, origin.plan.figures
    due = figures.shares * over_by(book.grids, origin.at)
    low, high = band(book.layout, book.arrays.stages.session, due, figures.traded)
    planned = book.layout.sum(due)
    frame = pd.DataFrame({"planned": planned, "low": low, "high": high}, index=book.names)
    found = frame.reindex(names, fill_value=0.0)
    return tuple(found[name].to_numpy(dtype=float) for name in frame.columns)  # type: ignore[return-value]


def _states(names: list[str], rest: Rest) -> list[str]:
    left = rest.left
    known = {
        name: OVER if over else GOING if shares > 0.0 else COMPLETE
        for name, shares, over in zip(left.names, left.shares, left.over, strict=True)
    }
    return [known.get(name, CANCELLED) for name in names]


def _imbalance(rows: pd.DataFrame, rest: Rest) -> Array:
    """Own outstanding imbalance of each order's symbol, shares, in the order's direction."""
    own = rows["symbol"].map(dict(rest.own)).fillna(0.0).to_numpy(dtype=float)
    return rows["side"].to_numpy(dtype=float) * own


def _std(names: list[str], rest: Rest) -> Array:
    """Standard deviation of the cost of the rest, base currency."""
    if rest.plan is None:
        return np.zeros(len(names))
    figures = rest.plan.figures
    std = pd.Series(figures.by_order(figures.pooled.cost_std), index=rest.plan.book.names)
    return np.asarray(std.reindex(names, fill_value=0.0), dtype=np.float64)
