"""Fills of a plan as if all went as planned, in many small pieces, and plans of their rest."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from scheduler import Plan

PIECES = 60


def on_plan(
    plan: Plan, until: str | pd.Timestamp, *, prices: dict[str, float] | None = None
) -> pd.DataFrame:
    """Fills of every bucket that is over by then, whole shares, at the plan's or the given prices.

    A bucket's slice is spread evenly over it in pieces, an auction's is one fill. Evenly by the
    clock, which is by the volume, as the model has it, where a profile is level within buckets.
    """
    known = dict(zip(plan.book.rows["symbol"], plan.book.rows["price"], strict=True))
    known |= prices or {}
    rows: list[dict[str, Any]] = []
    for row in plan.schedule.itertuples():
        begin, end = pd.Timestamp(row.start), pd.Timestamp(row.end)
        instant = begin == end
        if row.shares == 0 or end > pd.Timestamp(until) or (instant and end == pd.Timestamp(until)):
            continue
        count = 1 if instant else min(PIECES, int(row.shares))
        sizes = np.diff(np.round(row.shares * np.arange(count + 1) / count))
        rows += [
            {
                "order_id": row.order_id,
                "time": (begin + (end - begin) * (piece + 0.5) / count).isoformat(),
                "quantity": float(size),
                "price": known[row.symbol],
            }
            for piece, size in enumerate(sizes.tolist())
        ]
    return pd.DataFrame(rows, columns=["order_id", "time", "quantity", "price"])
