"""An invented transition of six names: orders, market, risk tables, and plans of them."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from scheduler import Plan, Settings, plan
from tests.desk import DAY, Row, name, task

SYMBOLS = ("OAK", "ELM", "ASH", "FIR", "YEW", "BAY")
SIDES = ("buy", "sell", "buy", "sell", "sell", "buy")
QUANTITY = (40_000, 30_000, 5_000, 50_000, 6_000, 26_000)
PRICE = (50.0, 64.5, 120.0, 21.4, 88.0, 33.3)
FX = (1.0, 1.0, 1.25, 1.0, 1.25, 1.0)
GROUP = ("home", "home", "abroad", "home", "abroad", "home")
EXPOSURES = pd.DataFrame(
    {
        "symbol": SYMBOLS,
        "market": [1.1, 0.9, 1.0, 1.2, 0.8, 1.0],
        "size": [0.2, -0.4, 0.9, 0.0, -1.1, 0.5],
    }
)
COVARIANCE = pd.DataFrame(
    {"factor": ["market", "size"], "market": [1.2e-4, -1e-5], "size": [-1e-5, 3e-5]}
)
RISK = {"exposures": EXPOSURES, "factor_covariance": COVARIANCE}
SIGNED = np.array([1 if side == "buy" else -1 for side in SIDES]) * np.array(FX) * PRICE
GROSS = float(np.abs(SIGNED) @ QUANTITY)


def rows(**columns: Any) -> list[Row]:
    """Six orders; columns of the orders table for all of them."""
    return [
        task(quantity, symbol=symbol, side=side) | columns
        for symbol, side, quantity in zip(SYMBOLS, SIDES, QUANTITY, strict=True)
    ]


def market(**columns: Any) -> list[Row]:
    """Their market: two currencies and two groups on one exchange, half-hour buckets."""
    return [
        name(
            symbol,
            price=price,
            fx=fx,
            currency="USD" if fx == 1.0 else "GBP",
            group=group,
            spread_bps=4,
        )
        | columns
        for symbol, price, fx, group in zip(SYMBOLS, PRICE, FX, GROUP, strict=True)
    ]


def settings_of(**values: Any) -> Settings:
    chosen = {"bucket": 30.0, "urgency": 0.5} | values
    if "risk_aversion" in chosen or "risk_budget" in chosen or "cost_budget" in chosen:
        del chosen["urgency"]
    return Settings().with_values("cost", base_currency="USD").with_values("plan", **chosen)


def listed(
    orders: list[Row] | None = None,
    names: list[Row] | None = None,
    *,
    aim: dict[str, Any] | None = None,
    **options: Any,
) -> Plan:
    """The list's plan; settings of the section [plan] as `aim`."""
    frames = pd.DataFrame(orders or rows()), pd.DataFrame(names or market())
    options = {"settings": settings_of(**(aim or {}))} | options
    return plan(*frames, date=DAY, at="09:30", **options)


def corridor(kind: str, lower: Any = "", upper: Any = "", **window: str) -> pd.DataFrame:
    return pd.DataFrame([{"kind": kind, "lower": lower, "upper": upper, **window}])


TIES = pd.DataFrame(
    {
        "kind": ["cash", "factor:market"],
        "lower": ["-0.3%", "-0.1%"],
        "upper": ["0.3%", "0.1%"],
        "from": ["", "10:30"],
        "to": ["15:00", ""],
    }
)
