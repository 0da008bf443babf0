"""Plans of invented orders for the report's tests."""

from __future__ import annotations

import base64
import datetime
import gzip
import json
import re
from functools import cache
from typing import Any

import pandas as pd

from scheduler.plan import Plan, plan
from scheduler.settings import Settings

DAY = datetime.date(2026, 3, 5)
NASTY = "<img src=x onerror=document.title='owned'>"

MARKET = pd.DataFrame(
    {
        "symbol": ["QUAY", "MILL", "LOCK"],
        "price": ["48.2", "112.5", "23.7"],
        "adv": ["2400000", "800000", "3500000"],
        "daily_vol": ["0.021", "0.016", "0.028"],
        "currency": ["USD"] * 3,
        "calendar": ["XNYS"] * 3,
        "spread_bps": ["4", "3", "6"],
    }
)
ORDERS = pd.DataFrame(
    {
        "order_id": ["o-1", "o-2", "o-3"],
        "symbol": ["QUAY", "MILL", "LOCK"],
        "side": ["buy", "sell", "buy"],
        "quantity": ["180000", "42000", "650000"],
        "start": ["", "10:07", "2026-03-05T13:00"],
        "end": ["", "15:10", "2026-03-06T12:00"],
        "max_participation": ["", "", "0.2"],
        "lot_size": ["100", "1", "100"],
    }
)


@cache
def three_orders() -> Plan:
    """A whole session with a reading, part of a session, and one over a night under tight caps."""
    readings = pd.DataFrame({"symbol": ["QUAY"], "imbalance": ["0.15"]})
    return plan(ORDERS, MARKET, readings=readings, date=DAY, at="09:30")


@cache
def one_order(calendar: str = "XNYS", finish: str = "") -> Plan:
    market = MARKET[:1].assign(calendar=calendar)
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:1]
    settings = Settings().with_values("plan", finish=finish)
    return plan(orders, market, settings=settings, date=DAY, at="09:30")


@cache
def nasty_names() -> Plan:
    """Texts that would run as markup wherever the page forgot to escape them."""
    symbol, name = f"{NASTY}S", f"{NASTY}: P"
    market = MARKET[:2].assign(symbol=[symbol, "MILL"], group=NASTY, profile=name)
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:2]
    orders = orders.assign(order_id=[f"{NASTY}O", "</script>"], symbol=[symbol, "MILL"])
    profile = pd.DataFrame(
        {
            "profile": [name] * 2,
            "start": ["09:30", "12:00"],
            "end": ["12:00", "16:00"],
            "kind": ["continuous"] * 2,
            "volume_share": ["0.5", "0.501"],
            "variance_share": ["0.5", "0.5"],
        }
    )
    return plan(orders, market, profiles=profile, date=DAY, at="09:30")


def unpacked(page: str, name: str) -> str:
    """A packed part of a page, as its script sees it."""
    found = re.search(rf'<script type="application/octet-stream" id="{name}">([^<]*)<', page)
    assert found is not None
    return gzip.decompress(base64.b64decode(found.group(1))).decode()


def data_of(page: str) -> dict[str, Any]:
    result: dict[str, Any] = json.loads(unpacked(page, "data"))
    return result
