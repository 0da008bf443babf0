"""The closes table: what each symbol stood at when its orders were over, and what its market did.

Canonical frame: `symbol`, `close` (currency/share), `market_move` (fraction, from the decision to
the close; NaN: not known), `beta` (1).
"""

from __future__ import annotations

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Table, gates

TABLE = Table(
    "closes",
    (
        Words("symbol", "as in the market table, once per symbol", required=True),
        Number(
            "close",
            "currency per share, at the close or when the rest was cancelled",
            required=True,
            low=0,
            above=True,
        ),
        Number(
            "market_move",
            "its market's return from decision to close, a fraction, as in 0.005",
            empty="not known",
            low=-1,
            high=10,
        ),
        Number("beta", "the symbol's beta to that market", default=1.0, low=-100, high=100),
    ),
    unique=("symbol",),
)


ensure, read_closes = gates(TABLE)
