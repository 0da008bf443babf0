"""The holdings table: a portfolio in shares, be it the one there is or the one there is to be.

Canonical frame: `symbol`, `shares` (a short position is negative; fractions are checked against
the market table's calendars).
"""

from __future__ import annotations

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Table, gates
from scheduler.tables.orders import MOST_SHARES

TABLE = Table(
    "holdings",
    (
        Words("symbol", "as in the market table, once per symbol", required=True),
        Number(
            "shares",
            "shares held, negative for a short position",
            required=True,
            low=-MOST_SHARES,
            high=MOST_SHARES,
        ),
    ),
    unique=("symbol",),
)


ensure, read_holdings = gates(TABLE)
