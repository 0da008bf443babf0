"""The factor_covariance table: how the factors move, and move together, in a day.

Canonical frame: `factor`, then one column per factor in the order of the rows; symmetric, and
without negative eigenvalue. Entries are per day, in the squared units of the factors.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import Problem
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Checked, Draft, Table, gates

TOLERANCE = 1e-8
"""Asymmetry, and negative eigenvalues over the largest one, above which a table is refused."""
SILENT_TOLERANCE = 1e-12
"""Negative eigenvalues over the largest one that are rounding, and are left as they are."""

TABLE = Table(
    "factor_covariance",
    (Words("factor", "as in the exposures table, once per factor", required=True),),
    unique=("factor",),
    rest=Number(
        "(each factor)",
        "covariance per day of the row's factor and the column's",
        required=True,
        low=-1e12,
        high=1e12,
    ),
)


def covariance_matrix(covariance: Checked, factors: Iterable[str]) -> NDArray[np.float64]:
    """(K, K) in the order given; NaN where a factor has no row."""
    names = list(factors)
    square = covariance.frame.set_index("factor").reindex(index=names, columns=names)
    return square.to_numpy(dtype=np.float64)


def _check_square(draft: Draft) -> None:
    """The same names as rows and as columns; the columns are put in the order of the rows."""
    rows = draft.frame["factor"]
    columns = list(draft.frame.columns[1:])
    lacking = rows.notna() & ~rows.isin(columns)
    draft.flag(lacking.to_numpy(), "factor", "has no column", "add a column of that name")
    remedy = "add a row of that name, or remove the column"
    draft.problems += [
        Problem(draft.raw.source, 1, name, None, "has no row", remedy)
        for name in columns
        if len(rows) and name not in set(rows)
    ]
    if not draft.problems:
        draft.frame = draft.frame[["factor", *rows]]


def _check_matrix(draft: Draft) -> None:
    for step in (_check_variances, _symmetrise, _clean):
        if not draft.problems:  # each needs what the one before it has shown
            step(draft)


def _check_variances(draft: Draft) -> None:
    for at in np.flatnonzero(np.diag(_square(draft)) < 0).tolist():
        name = str(draft.frame["factor"].iat[at])
        draft.flag_row(at, name, "is a negative variance", "check the factor's own entry")


def _symmetrise(draft: Draft) -> None:
    """Refuse a pair whose entries differ by more than rounding; halve smaller differences.

    The scale of a pair is the most its covariance can be, the root of both variances' product.
    """
    matrix, names, rows = _square(draft), draft.frame["factor"], draft.raw.rows
    scale = np.sqrt(np.outer(np.diag(matrix), np.diag(matrix)))
    differs = np.abs(matrix - matrix.T) > TOLERANCE * scale
    for at, other in np.argwhere(np.triu(differs)).tolist():
        mirror = f"{matrix[other, at]:.10g} in row {rows[other]}, column {names[at]}"
        remedy = f"a covariance is symmetric: give {names[at]} and {names[other]} one value"
        draft.flag_row(at, names[other], f"differs from {mirror}", remedy)
    _replace(draft, (matrix + matrix.T) / 2)


def _clean(draft: Draft) -> None:
    """Refuse a negative eigenvalue, or put it to 0 where it is small."""
    values, vectors = np.linalg.eigh(_square(draft))
    low, high = values[0], values[-1]
    if low < -TOLERANCE * abs(high):
        weights = np.argsort(-np.abs(vectors[:, 0]))[:2]
        mostly = " and ".join(draft.frame["factor"].iloc[weights])
        ratio = f"{-low / high:.2g} of the largest" if high > 0 else "the largest is not above 0"
        rule = f"has the negative eigenvalue {low:.3g} ({ratio}), mostly of {mostly}"
        remedy = "no portfolio has a negative variance: estimate all entries from one history"
        draft.problems.append(Problem(draft.raw.source, None, None, None, rule, remedy))
    elif low < -SILENT_TOLERANCE * high:
        cleaned = (vectors * np.maximum(values, 0)) @ vectors.T
        _replace(draft, (cleaned + cleaned.T) / 2)
        draft.note(f"negative eigenvalues, down to {-low / high:.2g} of the largest, put to 0")


def _square(draft: Draft) -> NDArray[np.float64]:
    return draft.frame.iloc[:, 1:].to_numpy(dtype=np.float64)


def _replace(draft: Draft, matrix: NDArray[np.float64]) -> None:
    draft.frame = pd.DataFrame(matrix, columns=draft.frame.columns[1:]).assign(
        factor=draft.frame["factor"]
    )[list(draft.frame.columns)]


ensure, read_factor_covariance = gates(TABLE, _check_square, _check_matrix)
