"""Own orders of an invented desk, filled at the prices of a known impact law."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from scheduler.history.executed import Executed, executed
from scheduler.sessions import session_hours
from scheduler.settings import Settings
from scheduler.tables import fills as fills_table
from scheduler.tables import market as market_table
from scheduler.tables import orders as orders_table
from tests.past import session_dates

MARKET = {
    "symbol": ["QUAY", "MILL"],
    "price": [50.0, 20.0],
    "adv": [2_000_000.0, 400_000.0],
    "daily_vol": [0.02, 0.03],
    "calendar": ["XNYS", "XNYS"],
    "spread_bps": [4.0, 10.0],
}
Tables = tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]


def tables(
    count: int = 200,
    *,
    days: int = 40,
    sizes: tuple[float, float] = (0.002, 0.3),
    minutes: tuple[float, float] = (20.0, 360.0),
    seed: int = 1,
) -> Tables:
    """Orders, fills and market: orders of random size (parts of ADV) and length, filled evenly."""
    rng = np.random.default_rng(seed)
    dates = session_dates(days, "2026-02-27")
    orders, fills = [], []
    for i in range(count):
        at = rng.integers(0, 2)
        opens, _ = session_hours("XNYS", dates[i % days])
        length = np.exp(rng.uniform(*np.log(minutes)))
        start = opens + pd.Timedelta(rng.uniform(0.0, 385.0 - length), "min").floor("s")
        part = np.exp(rng.uniform(*np.log(sizes)))
        pieces = max(2, int(length / 15.0))
        each = max(1.0, np.round(part * MARKET["adv"][at] / pieces))
        name, price = f"o-{i}", MARKET["price"][at]
        orders.append(
            {
                "order_id": name,
                "symbol": MARKET["symbol"][at],
                "side": rng.choice(["buy", "sell"]),
                "quantity": each * pieces,
                "start": start.isoformat(),
                "arrival_price": price,
            }
        )
        times = start + pd.to_timedelta(length * (np.arange(pieces) + 0.5) / pieces, "min").floor(
            "s"
        )
        fills += [
            {"order_id": name, "time": time.isoformat(), "quantity": each, "price": price}
            for time in times
        ]
    return pd.DataFrame(orders), pd.DataFrame(fills), pd.DataFrame(MARKET)


def read(made: Tables, settings: Settings | None = None) -> Executed:
    """The orders as arrays, their fills at the arrival price."""
    orders, fills, market = made
    rules = settings or Settings()
    found, _ = executed(
        fills_table.ensure(fills),
        orders_table.ensure(orders),
        market_table.ensure(market),
        None,
        rules,
    )
    return found


def slipped(
    past: Executed, law: tuple[float, float, float], *, noise: float = 0.2, seed: int = 1
) -> Executed:
    """The orders with slippage by a law (k, delta, r), and noise in units of the model's own."""
    rng = np.random.default_rng(seed)
    mean = law[0] * past.predicted(law[1], law[2])
    return replace(past, slippage=mean + noise * past.error * rng.standard_normal(len(past)))


def priced(made: Tables, past: Executed) -> Tables:
    """The tables with fills at prices that have the slippage of the orders, and half spreads."""
    orders, fills, market = made
    named = market.set_index("symbol")
    symbol = orders["symbol"]
    half = 0.5e-4 * symbol.map(named["spread_bps"]).to_numpy()
    paid = past.slippage * symbol.map(named["daily_vol"]).to_numpy() + half
    factor = 1.0 + np.where(orders["side"] == "buy", 1.0, -1.0) * paid
    by_order = dict(zip(orders["order_id"], factor, strict=True))
    price = fills["price"] * fills["order_id"].map(by_order)
    return orders, fills.assign(price=price), market
