"""The exposures table: how each symbol moves with each factor.

Canonical frame: `symbol`, then one column per factor, in the order of the source: the fraction
of price that the symbol moves when the factor moves by 1. The names are the user's, and those
of the factor_covariance table.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Checked, Table, gates

TABLE = Table(
    "exposures",
    (Words("symbol", "as in the market table, once per symbol", required=True),),
    unique=("symbol",),
    rest=Number(
        "(each factor)",
        "exposure: fraction of price per unit of the factor",
        required=True,
        low=-1e9,
        high=1e9,
    ),
)


def factor_names(exposures: Checked) -> list[str]:
    """The factors of a checked table, in its order."""
    return [str(name) for name in exposures.frame.columns[1:]]


def exposure_matrix(
    exposures: Checked, symbols: Sequence[str], factors: Sequence[str]
) -> NDArray[np.float64]:
    """(N, K) in the orders given; NaN where a symbol has no row."""
    rows = exposures.frame.set_index("symbol")[list(factors)].reindex(list(symbols))
    return rows.to_numpy(dtype=np.float64)


ensure, read_exposures = gates(TABLE)
