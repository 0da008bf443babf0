"""The fills table: what of one's own orders was traded, when and at what price.

Canonical frame: `order_id` (as in the orders table), `time` (canonical text of `tables.times`),
`quantity` (shares), `price` (currency/share), `venue` (text, None: not known), `fee` (currency, the
whole fill's; NaN: not known).
"""

from __future__ import annotations

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Table, gates
from scheduler.tables.orders import MOST_SHARES
from scheduler.tables.times import moment

TABLE = Table(
    "fills",
    (
        Words("order_id", "as in the orders table", required=True),
        Words("time", "when it traded: time or date-time", required=True, parse=moment),
        Number("quantity", "shares", required=True, low=0, above=True, high=MOST_SHARES),
        Number("price", "currency per share", required=True, low=0, above=True),
        Words("venue", "where it traded", empty="not known"),
        Number("fee", "currency, of the whole fill", empty="not known"),
    ),
)


ensure, read_fills = gates(TABLE)
