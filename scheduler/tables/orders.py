"""The orders table: what is to be traded, and between when and when.

Canonical frame, one row per order in the order of the source: `order_id`, `symbol` (text),
`side` (int, +1 buy, -1 sell), `quantity` (shares, float), `start` and `end` (canonical text of
`tables.times`, None: session open and close), `max_participation`,
`max_auction_participation` (NaN: the setting), `min_slice` (shares, 0: none), `lot_size` (NaN:
the market's), `must_complete` (bool), `arrival_price` (NaN: the market's price).
"""

from __future__ import annotations

import numpy as np

from scheduler.tables.cells import not_modelled, side, yes_no
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Draft, Table, gates
from scheduler.tables.times import is_empty_window, moment

MOST_SHARES = 1e15
"""Share counts stay below 2**53, so that each whole number has its own float."""

_WINDOW = "HH:MM, local date-time, or date-time with offset (ISO 8601)"

TABLE = Table(
    "orders",
    (
        Words("order_id", "a name of your own, once per order", required=True),
        Words("symbol", "as in the market table", required=True),
        Words("side", "buy or sell", required=True, parse=side, dtype="int64"),
        Number(
            "quantity",
            "shares to trade",
            required=True,
            low=0,
            above=True,
            high=MOST_SHARES,
            remedy="give a positive number of shares; the side says buy or sell",
        ),
        Words("start", _WINDOW, empty="session open", parse=moment),
        Words("end", _WINDOW, empty="session close", parse=moment),
        Number(
            "max_participation",
            "own over total volume, continuous trading",
            empty="the setting",
            low=0,
            high=1,
        ),
        Number(
            "max_auction_participation",
            "own over total volume, auctions",
            empty="the setting",
            low=0,
            high=1,
        ),
        Number("min_slice", "smallest slice, shares", default=0.0, low=0, high=MOST_SHARES),
        Number(
            "lot_size",
            "shares",
            empty="as in the market table",
            low=0,
            above=True,
            high=MOST_SHARES,
        ),
        Words(
            "must_complete",
            "whether the whole quantity has to be traded: true or false",
            default=True,
            parse=yes_no,
            dtype="bool",
        ),
        Number(
            "arrival_price",
            "benchmark, currency per share",
            empty="the market's price",
            low=0,
            above=True,
        ),
        Words("price_limit", "not modelled; has to stay empty", parse=not_modelled, kept=False),
    ),
    unique=("order_id",),
)


def _check_windows(draft: Draft) -> None:
    pairs = list(zip(draft.frame["start"], draft.frame["end"], strict=True))
    filled = {pair for pair in pairs if None not in pair}
    empty = {(start, end) for start, end in filled if is_empty_window(start, end)}
    mask = np.array([pair in empty for pair in pairs], dtype=np.bool_)
    draft.flag(mask, "end", "is not after start", "give an end later than the start")


def _check_min_slice(draft: Draft) -> None:
    over = (draft.frame["min_slice"] > draft.frame["quantity"]).to_numpy()
    draft.flag(over, "min_slice", "is more than the quantity", "give a smaller slice, or none")


ensure, read_orders = gates(TABLE, _check_windows, _check_min_slice)
