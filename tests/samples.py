"""Invented tables that are right, and ways to make one cell of them wrong."""

from __future__ import annotations

import csv
from collections.abc import Callable

import pandas as pd
import pytest

from scheduler.errors import InputError, Problem
from scheduler.tables.draft import Checked

ORDERS = {
    "order_id": ["o-1", "o-2"],
    "symbol": ["QUAY", "MILL"],
    "side": ["buy", "sell"],
    "quantity": ["12000", "800"],
    "start": ["10:00", ""],
    "end": ["15:30", ""],
    "max_participation": ["0.2", ""],
    "min_slice": ["100", ""],
    "must_complete": ["false", ""],
}
MARKET = {
    "symbol": ["QUAY", "MILL"],
    "price": ["101.25", "7.5"],
    "adv": ["2000000", "350000"],
    "daily_vol": ["0.018", "0.03"],
    "currency": ["USD", "USD"],
    "calendar": ["XNYS", "XNYS"],
    "spread_bps": ["4", "11.5"],
}
PROFILES = {
    "profile": ["day", "day"],
    "start": ["09:30", "16:00"],
    "end": ["16:00", "16:05"],
    "kind": ["continuous", "auction"],
    "volume_share": ["0.9", "0.1"],
    "variance_share": ["0.98", "0.02"],
}
READINGS = {"symbol": ["QUAY", "MILL"], "imbalance": ["0.4", "-1.5"], "time": ["", "10:15"]}
BARS = {
    "symbol": ["QUAY", "QUAY"],
    "time": ["2026-01-05", "2026-01-06"],
    "open": ["100", "101"],
    "high": ["103", "102"],
    "low": ["99", "100.5"],
    "close": ["101", "101.5"],
    "volume": ["1900000", "0"],
}

EXPOSURES = {
    "symbol": ["QUAY", "MILL"],
    "market": ["1.1", "0.7"],
    "size": ["-0.4", "1.5"],
}
FACTOR_COVARIANCE = {
    "factor": ["market", "size"],
    "market": ["0.0001", "-0.00001"],
    "size": ["-0.00001", "0.00002"],
}
RETURNS = {
    "date": [f"2026-{month:02d}-{day:02d}" for month in (1, 2, 3) for day in range(1, 21)],
    "QUAY": [f"{(7 * day % 11 - 5) / 1000:g}" for day in range(60)],
    "MILL": [f"{(5 * day % 13 - 6) / 1000:g}" for day in range(60)],
}
CORRIDORS = {
    "kind": ["cash", "factor:market"],
    "lower": ["-100000", ""],
    "upper": ["5%", "20000"],
    "from": ["", "10:00"],
    "to": ["", "15:30"],
}
CONSTRAINTS = {
    "name": ["opening", "opening"],
    "order_id": ["o-1", "o-2"],
    "bucket": ["1", "1"],
    "coefficient": ["1", "-2.5"],
    "lower": ["", ""],
    "upper": ["500", ""],
}
HOLDINGS = {"symbol": ["QUAY", "MILL"], "shares": ["1200", "-300"]}
TRADES = {
    "symbol": ["QUAY", "QUAY"],
    "time": ["2026-01-05T10:00:00", "2026-01-05T10:00:00.25"],
    "price": ["100.02", "100"],
    "quantity": ["300", "1200"],
    "bid": ["100", ""],
    "ask": ["100.02", ""],
}
FILLS = {
    "order_id": ["o-1", "o-1"],
    "time": ["2026-01-05T10:00:00", "10:20"],
    "quantity": ["300", "1200"],
    "price": ["101.3", "101.32"],
    "venue": ["XNYS", ""],
    "fee": ["0.9", ""],
}
CLOSES = {
    "symbol": ["QUAY", "MILL"],
    "close": ["101.9", "7.45"],
    "market_move": ["0.004", ""],
    "beta": ["1.2", ""],
}
SAMPLES = {
    "orders": ORDERS,
    "market": MARKET,
    "profiles": PROFILES,
    "readings": READINGS,
    "exposures": EXPOSURES,
    "factor_covariance": FACTOR_COVARIANCE,
    "returns": RETURNS,
    "corridors": CORRIDORS,
    "constraints": CONSTRAINTS,
    "holdings": HOLDINGS,
    "bars": BARS,
    "trades": TRADES,
    "fills": FILLS,
    "closes": CLOSES,
}

Columns = dict[str, list[str]]


def changed(table: Columns, **cells: str) -> pd.DataFrame:
    """The table with the given cells in its second row (line 3 of a file)."""
    columns = {name: list(values) for name, values in table.items()}
    for name, text in cells.items():
        columns.setdefault(name, [""] * len(next(iter(columns.values()))))[1] = text
    return pd.DataFrame(columns)


def csv_text(table: Columns | pd.DataFrame) -> str:
    return pd.DataFrame(table).to_csv(index=False, quoting=csv.QUOTE_NONNUMERIC)


def refused(ensure: Callable[..., Checked], source: object, **options: object) -> list[Problem]:
    """The problems that a table is refused with."""
    with pytest.raises(InputError) as caught:
        ensure(source, **options)
    return list(caught.value.problems)
