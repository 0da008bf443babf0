"""The trades table: every trade of the market, with the quote in force when it came.

Canonical frame: `symbol`, `time` (canonical text: a local date-time or one with offset), `price`
(currency/share), `quantity` (shares), `bid`, `ask` (currency/share; NaN: not known). Trades of one
time are in the order in which they came; that a symbol's times never go back is checked where
they are placed (`scheduler.history.tape`), for only there is it known what they mean.
"""

from __future__ import annotations

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Draft, Table, gates
from scheduler.tables.orders import MOST_SHARES
from scheduler.tables.times import dated

TABLE = Table(
    "trades",
    (
        Words("symbol", "as in the market table", required=True),
        Words("time", "when it traded: date-time", required=True, parse=dated),
        Number("price", "currency per share", required=True, low=0, above=True),
        Number("quantity", "shares", required=True, low=0, above=True, high=MOST_SHARES),
        Number("bid", "best bid before the trade", empty="not known", low=0, above=True),
        Number("ask", "best offer before the trade", empty="not known", low=0, above=True),
    ),
)


def _check_quotes(draft: Draft) -> None:
    crossed = (draft.frame["bid"] > draft.frame["ask"]).to_numpy()
    remedy = "a crossed quote is stale or wrong: leave bid and ask empty where they are not known"
    draft.flag(crossed, "bid", "is above the ask", remedy)


ensure, read_trades = gates(TABLE, _check_quotes)
