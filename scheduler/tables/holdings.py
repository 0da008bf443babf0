"""The holdings table: a portfolio in shares, be it the one there is or the one there is to be.

Canonical frame: `symbol`, `shares` (a short position is negative; fractions are checked against
the market table's calendars).
"""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from scheduler.settings import DEFAULTS, Settings
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Checked, Table, read_draft
from scheduler.tables.orders import MOST_SHARES
from scheduler.tables.source import Source

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


def ensure(
    source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
) -> Checked:
    """Read and check a holdings table from a path, `-` or a frame.

    Raises:
        InputError: with every problem of the table.
    """
    return read_draft(TABLE, source, ignore_columns).checked()


def read_holdings(source: Source, *, ignore_columns: Iterable[str] = ()) -> pd.DataFrame:
    """The canonical holdings frame; see `ensure`."""
    return ensure(source, ignore_columns=ignore_columns).frame
