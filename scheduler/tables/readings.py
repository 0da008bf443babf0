"""The readings table: how far one side of the market outweighs the other just now.

Canonical frame: `symbol`, `imbalance` (the others' net buying in relaxation volumes, + is
more buyers, from -5 to 5), `time` (canonical text of `tables.times`; None: time zero).
"""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from scheduler.settings import DEFAULTS, Settings
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Checked, Table, read_draft
from scheduler.tables.source import Source
from scheduler.tables.times import moment

TABLE = Table(
    "readings",
    (
        Words("symbol", "as in the market table", required=True),
        Number(
            "imbalance",
            "net buying over the balanced volume, + is more buyers",
            required=True,
            low=-5,
            high=5,
            remedy="from volumes bought B and sold S by the aggressor: (B - S) / (2 min(B, S))",
        ),
        Words("time", "when it was taken", empty="time zero of the plan", parse=moment),
    ),
    unique=("symbol", "time"),
)


def ensure(
    source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
) -> Checked:
    """Read and check a readings table from a path, `-` or a frame.

    Raises:
        InputError: with every problem of the table.
    """
    return read_draft(TABLE, source, ignore_columns).checked()


def read_readings(source: Source, *, ignore_columns: Iterable[str] = ()) -> pd.DataFrame:
    """The canonical readings frame; see `ensure`."""
    return ensure(source, ignore_columns=ignore_columns).frame
