"""The readings table: how far one side of the market outweighs the other just now.

Canonical frame: `symbol`, `imbalance` (the others' net buying in relaxation volumes, + is
more buyers, from -5 to 5), `time` (canonical text of `tables.times`; None: time zero).
"""

from __future__ import annotations

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Table, gates
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


ensure, read_readings = gates(TABLE)
