"""Lists of invented orders planned as one, for the report's tests."""

from __future__ import annotations

from functools import cache

import pandas as pd

from scheduler.plan import Plan, plan
from scheduler.settings import Settings
from tests.report.plans import DAY, NASTY

MARKET = pd.DataFrame(
    {
        "symbol": ["QUAY", "MILL", "LOCK", "WEIR", "SLUICE", "FORD"],
        "price": ["48.2", "112.5", "23.7", "31", "8.4", "64"],
        "adv": ["2400000", "800000", "3500000", "900000", "6000000", "1100000"],
        "daily_vol": ["0.021", "0.016", "0.028", "0.019", "0.024", "0.017"],
        "currency": ["USD", "USD", "USD", "GBP", "GBP", "USD"],
        "fx": ["1", "1", "1", "1.25", "1.25", "1"],
        "calendar": ["XNYS", "XNYS", "XNYS", "XLON", "XLON", "XNYS"],
        "group": ["home", "home", "home", "abroad", "abroad", ""],
    }
)
ORDERS = pd.DataFrame(
    {
        "order_id": ["a", "b", "c", "d", "e", "f"],
        "symbol": MARKET["symbol"],
        "side": ["buy", "sell", "buy", "sell", "buy", "sell"],
        "quantity": ["90000", "42000", "650000", "60000", "240000", "21000"],
        "max_participation": ["", "", "0.2", "", "", ""],
        "lot_size": ["100", "1", "100", "1", "1", "1"],
    }
)
EXPOSURES = pd.DataFrame(
    {
        "symbol": MARKET["symbol"],
        "market": ["1.1", "0.9", "1.3", "0.8", "1", "1.05"],
        "size": ["0.4", "-0.8", "1.2", "-0.1", "0.6", "0"],
    }
)
COVARIANCE = pd.DataFrame(
    {"factor": ["market", "size"], "market": ["1e-4", "5e-6"], "size": ["5e-6", "1e-5"]}
)
CORRIDORS = pd.DataFrame(
    {
        "kind": ["cash", "cash", "factor:market", "group:home"],
        "lower": ["-30%", "", "", "-90%"],
        "upper": ["60%", "35%", "70%", "90%"],
        "from": ["", "11:00", "10:00", ""],
        "to": ["", "14:00", "", ""],
    }
)
SETTINGS = (
    Settings()
    .with_values("cost", base_currency="USD")
    .with_values("plan", urgency=0.3, bucket=30.0)
)
AT = "2026-03-05T08:00+00:00"


@cache
def six_orders() -> Plan:
    """Two exchanges and currencies, two factors, four corridors of which two are on cash."""
    return plan(
        ORDERS,
        MARKET,
        exposures=EXPOSURES,
        factor_covariance=COVARIANCE,
        corridors=CORRIDORS,
        settings=SETTINGS,
        date=DAY,
        at=AT,
    )


@cache
def without_factors() -> Plan:
    """Two orders on one exchange that share a cash corridor over a night, and no risk table."""
    market = MARKET[:2].drop(columns=["group"])
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:2].assign(end="2026-03-06T11:00")
    corridors = pd.DataFrame({"kind": ["cash"], "lower": ["-60%"], "upper": ["60%"]})
    return plan(orders, market, corridors=corridors, settings=SETTINGS, date=DAY, at="09:30")


@cache
def nasty_list() -> Plan:
    """Factors, groups, symbols and ids that would run as markup if they were not escaped."""
    symbols = [f"{NASTY}{k}" for k in range(2)]
    market = MARKET[:2].assign(symbol=symbols, group=[f"{NASTY}g", "<b>h</b>"])
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:2].assign(
        order_id=[f"{NASTY}o", "</script>"], symbol=symbols
    )
    factor = f"{NASTY}f"
    exposures = pd.DataFrame({"symbol": symbols, factor: ["1", "0.9"], "%{y}": ["1", "0"]})
    covariance = pd.DataFrame(
        {"factor": [factor, "%{y}"], factor: ["1e-4", "0"], "%{y}": ["0", "1e-5"]}
    )
    corridors = pd.DataFrame(
        {"kind": [f"factor:{factor}", f"group:{NASTY}g"], "lower": ["-200%"] * 2, "upper": ["", ""]}
    )
    return plan(
        orders,
        market,
        exposures=exposures,
        factor_covariance=covariance,
        corridors=corridors,
        settings=SETTINGS,
        date=DAY,
        at="09:30",
    )
