"""The fills table: what of one's own orders was traded, when and at what price.

Canonical frame: `order_id` (as in the orders table), `time` (canonical text of `tables.times`),
`quantity` (shares), `price` (currency/share), `venue` (text, None: not known), `fee` (currency, the
whole fill's; NaN: not known).
"""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from scheduler.settings import DEFAULTS, Settings
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Checked, Table, read_draft
from scheduler.tables.orders import MOST_SHARES
from scheduler.tables.source import Source
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


def ensure(
    source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
) -> Checked:
    """Read and check a fills table from a path, `-` or a frame.

    Raises:
        InputError: with every problem of the table.
    """
    return read_draft(TABLE, source, ignore_columns).checked()


def read_fills(source: Source, *, ignore_columns: Iterable[str] = ()) -> pd.DataFrame:
    """The canonical fills frame; see `ensure`."""
    return ensure(source, ignore_columns=ignore_columns).frame
