"""Further linear limits on the slices of one order, and which of them clash."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.errors import InfeasibleError, MisuseError
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem

_NO_CLASH = 1e-9  # least total violation, in fractions of the order, that is taken for none
_PRICED = 1e-7  # multipliers of the elastic problem are 0 or of order 1


@dataclass(frozen=True)
class Row:
    """lower <= sum_k coefficients_k * (shares of stage buckets_k) <= upper.

    `buckets` are stages counted through all orders, as in `Orders`; a stage that cannot trade
    counts as 0. A row speaks of one order; an infinite bound is none.
    """

    name: str
    buckets: Index
    coefficients: Array
    lower: float
    upper: float


@dataclass(frozen=True)
class OrderRows:
    """The rows of one order over its n free buckets: lower <= matrix y <= upper.

    matrix : (m, n), largest coefficient of each row 1. lower, upper : (m,) fractions of the order.
    unit : (m,) what a fraction is in the row's own units.
    """

    names: tuple[str, ...]
    matrix: Array
    lower: Array
    upper: Array
    unit: Array

    def violation(self, fractions: Array) -> float:
        """Largest violation, in fractions of the order."""
        level = self.matrix @ fractions
        return float(np.maximum(self.lower - level, level - self.upper).max(initial=0.0))


def by_order(problem: Problem, rows: tuple[Row, ...]) -> list[OrderRows]:
    """The rows of each order.

    Raises
    ------
    MisuseError : a row over buckets of several orders.
    InfeasibleError : a row none of whose buckets can trade, though it asks for shares.
    """
    layout, count = problem.layout, len(problem.quantity)
    dense = np.zeros((len(rows), layout.entries))
    home = np.full(len(rows), -1)
    for i, row in enumerate(rows):
        at = np.searchsorted(problem.bucket, row.buckets).clip(max=layout.entries - 1)
        free = problem.bucket[at] == row.buckets
        np.add.at(dense[i], at[free], row.coefficients[free])
        owners = np.unique(layout.owner[np.flatnonzero(dense[i])])
        if len(owners) > 1:
            raise MisuseError(
                f"row {row.name!r} covers buckets of several orders; write one row for each order"
            )
        if len(owners) == 1:
            home[i] = owners[0]
        elif not row.lower <= 0.0 <= row.upper:
            raise InfeasibleError(
                f"row {row.name!r} asks for {_asked(row)}, but none of its buckets can trade; "
                "drop it, or give it buckets with volume and a cap above 0"
            )
    return [_rows_of(problem, rows, dense, np.flatnonzero(home == i), i) for i in range(count)]


def _asked(row: Row) -> str:
    return f"at least {row.lower:g}" if row.lower > 0.0 else f"at most {row.upper:g}"


def _rows_of(
    problem: Problem, rows: tuple[Row, ...], dense: Array, which: Index, order: int
) -> OrderRows:
    inside = slice(problem.layout.first[order], problem.layout.last[order] + 1)
    matrix = dense[which, inside]
    largest = np.abs(matrix).max(axis=1, initial=0.0)
    unit = largest * problem.quantity[order]
    return OrderRows(
        tuple(rows[i].name for i in which),
        matrix / largest[:, None],
        np.array([rows[i].lower for i in which]) / unit,
        np.array([rows[i].upper for i in which]) / unit,
        unit,
    )


def clash(problem: Problem, rows: OrderRows) -> str | None:
    """Why no schedule of one order keeps all its limits, or None if one does.

    Linear programme: least total violation of the rows within caps and ceilings. The rows with
    a multiplier at its optimum are those that cannot be kept together.
    """
    from scipy.optimize import linprog  # noqa: PLC0415

    buckets, count = problem.layout.entries, len(rows.names)
    due = np.flatnonzero(problem.ceiling[:-1] < 1.0)
    left = np.tri(buckets)[due]
    kept_above, kept_below = np.isfinite(rows.lower), np.isfinite(rows.upper)
    give = np.eye(count)
    sides = np.vstack(
        (
            np.hstack((-left, np.zeros((len(due), count)))),
            np.hstack((-rows.matrix, -give))[kept_above],
            np.hstack((rows.matrix, -give))[kept_below],
        )
    )
    limits = np.concatenate(
        (problem.ceiling[due] - 1.0, -rows.lower[kept_above], rows.upper[kept_below])
    )
    found = linprog(
        np.concatenate((np.zeros(buckets), np.ones(count))),
        A_ub=sides,
        b_ub=limits,
        A_eq=np.concatenate((np.ones(buckets), np.zeros(count)))[None],
        b_eq=[1.0],
        bounds=[(0.0, cap) for cap in np.minimum(problem.cap, 1.0)] + [(0.0, None)] * count,
        method="highs",
    )
    if found.x is None:
        return "caps and ceilings leave no schedule that completes; raise or move one of them"
    if found.fun <= _NO_CLASH:
        return None
    priced = np.abs(found.ineqlin.marginals[len(due) :]) > _PRICED
    places = np.concatenate((np.flatnonzero(kept_above), np.flatnonzero(kept_below)))
    names = [rows.names[i] for i in np.unique(places[priced])]
    violation = found.x[buckets:]
    missed = [
        f"{rows.names[i]!r} by {violation[i] * rows.unit[i]:.6g}"
        for i in np.flatnonzero(violation > _NO_CLASH)
    ]
    listed = ", ".join(repr(name) for name in names)
    subject = f"row {listed} clashes" if len(names) == 1 else f"rows {listed} clash"
    return (
        f"{subject} under the caps and ceilings of the order: at best one misses "
        f"{' and '.join(missed)}; loosen or drop one"
    )
