"""Fills of a plan as the model itself deals them: levels, the market's moves, own displacement."""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler import Plan
from scheduler.figures import Figures
from scheduler.model.risk import remaining


def dealt_by_the_model(plan: Plan, seed: int, figures: Figures | None = None) -> pd.DataFrame:
    """One fill a bucket, at the average price of a slice spread evenly over it.

    The price moves in a bucket by W, of variance v, and the slice's average sees int (1-u) dW: of
    variance v/3 and covariance v/2 with W. With v the bucket's variance of the cost over that of
    x, the whole has the model's own law, given the levels drawn.
    """
    rng = np.random.default_rng(seed)
    found = plan.figures if figures is None else figures
    orders, layout = found.orders, found.orders.stages.layout
    rate = orders.market.level_rate[layout.owner]
    drawn = rng.poisson(orders.market.level_rate[:, None], (len(orders), 8))
    level = drawn[layout.owner, orders.stages.session]
    base, own = found.stage_variance
    _, end = remaining(layout, orders.quantity, found.shares)
    square = end**2 + end * found.shares + found.shares**2 / 3.0
    swing = base * (1.0 + 2.0 * level) / (1.0 + 2.0 * rate) + own
    v = np.where(square > 0.0, swing / np.where(square > 0.0, square, 1.0), 0.0)
    moved = np.sqrt(v) * rng.standard_normal(layout.entries)
    within = moved / 2.0 + np.sqrt(v / 12.0) * rng.standard_normal(layout.entries)
    noise = layout.cumsum(moved) - moved + within
    safe = np.where(found.shares > 0.0, found.shares, 1.0)
    paid = found.stage_cost / safe - found.charges.fees
    side = plan.book.rows["side"].to_numpy(dtype=float)[layout.owner]
    price = orders.market.price[layout.owner] + side * (paid + noise)
    ends = np.concatenate([grid.end - (grid.end - grid.start) // 2 for grid in plan.book.grids])
    traded = found.shares > 0.0
    return pd.DataFrame(
        {
            "order_id": np.array(plan.book.names)[layout.owner[traded]],
            "time": [f"{time}+00:00" for time in ends[traded].astype("datetime64[ms]")],
            "quantity": found.shares[traded],
            "price": price[traded],
        }
    )
