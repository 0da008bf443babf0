"""The bars table: what a symbol traded at, and how much of it, in each period of the past.

Canonical frame: `symbol`, `time` (canonical text: a local date-time or one with offset, where
the bar begins; a date alone is its local midnight, a daily bar), `open`, `high`, `low`,
`close` (currency/share), `volume` (shares).
"""

from __future__ import annotations

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Draft, Table, gates
from scheduler.tables.times import date_time

TABLE = Table(
    "bars",
    (
        Words("symbol", "as in the market table", required=True),
        Words("time", "where the bar begins: date or date-time", required=True, parse=date_time),
        Number("open", "first price", required=True, low=0, above=True),
        Number("high", "highest price", required=True, low=0, above=True),
        Number("low", "lowest price", required=True, low=0, above=True),
        Number("close", "last price", required=True, low=0, above=True),
        Number("volume", "shares", required=True, low=0),
    ),
    unique=("symbol", "time"),
)


def _check_prices(draft: Draft) -> None:
    frame = draft.frame
    for name in ("open", "low", "close"):
        over = (frame[name] > frame["high"]).to_numpy()
        draft.flag(over, name, "is above the bar's high", "check the four prices of the bar")
    for name in ("open", "close"):
        under = (frame[name] < frame["low"]).to_numpy()
        draft.flag(under, name, "is below the bar's low", "check the four prices of the bar")


ensure, read_bars = gates(TABLE, _check_prices)
