"""Further linear limits on slices, over the free buckets of a problem, and which of them clash."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scheduler.coupling import Coupling
from scheduler.errors import InfeasibleError, MisuseError
from scheduler.model.ragged import Array, Index
from scheduler.problem import Orders, Problem, Row
from scheduler.solve.linear import due, dynamics, level_map, picked

_NO_CLASH = 1e-9  # least total violation, in fractions of an order, that is taken for none
_PRICED = 1e-7  # multipliers of the elastic problem are 0 or of order 1
_SEVERAL = -1  # in place of an order


@dataclass(frozen=True)
class FreeRows:
    """m rows over the M free buckets: lower <= matrix y <= upper, y in fractions of the orders.

    matrix : sparse (m, M), largest coefficient of each row 1. unit : (m,) what a fraction is in the
    row's own units. owner : (m,) the order that the row speaks of, or -1 if of several.
    """

    names: tuple[str, ...]
    matrix: Any
    lower: Array
    upper: Array
    unit: Array
    owner: Index

    def violation(self, fractions: Array) -> float:
        """Largest violation, in fractions of an order."""
        level = self.matrix @ fractions
        return float(np.maximum(self.lower - level, level - self.upper).max(initial=0.0))

    def of_order(self, order: int, inside: slice) -> tuple[FreeRows, Index]:
        """The rows of one order over its own buckets, and where they stand here."""
        which = np.flatnonzero(self.owner == order)
        return FreeRows(
            tuple(self.names[i] for i in which),
            self.matrix[which][:, inside],
            self.lower[which],
            self.upper[which],
            self.unit[which],
            np.zeros(len(which), dtype=np.int64),
        ), which

    def slope(self, price: Array) -> Array:
        """What multipliers (2, m) of lower and upper bounds add to the objective's slope, (M,)."""
        result: Array = self.matrix.T @ (price[1] - price[0])
        return result

    def paid(self, price: Array, fractions: Array) -> Array:
        """(m,) multipliers times the distance to their bounds."""
        level = self.matrix @ fractions
        distance = np.stack((level - self.lower, self.upper - level))
        result: Array = (price * np.where(price > 0.0, distance, 0.0)).sum(axis=0)
        return result


def several(name: str) -> MisuseError:
    """The refusal of a row over several orders that are planned alone."""
    return MisuseError(
        f"constraint {name!r} covers buckets of several orders that are planned alone; write one "
        "for each order, or plan them as one list, with a risk table or corridors"
    )


def check_forced(orders: Orders, shares: Array, known: NDArray[np.bool_]) -> None:
    """Refuse rows that orders without a choice break, and rows over several orders.

    Parameters
    ----------
    shares : (M,) slices of the orders that are `known`, (N,).
    """
    owner = orders.stages.layout.owner
    for row in orders.rows:
        order = owner[row.buckets[0]]
        if (owner[row.buckets] != order).any():
            raise several(row.name)
        excess = row.excess(shares) if known[order] else 0.0
        if excess > _NO_CLASH * float(np.abs(row.coefficients).max() * orders.quantity[order]):
            raise InfeasibleError(
                f"constraint {row.name!r} clashes with the caps of its order, which leave it no "
                f"choice: it is missed by {excess:.6g}; loosen or drop it, or raise the caps"
            )


def free_rows(problem: Problem) -> FreeRows:
    """The problem's rows over its free buckets; those that no free bucket can break are left out.

    Raises
    ------
    InfeasibleError : a row none of whose buckets can trade, though it asks for shares.
    """
    from scipy import sparse  # noqa: PLC0415

    layout = problem.layout
    matrix = sparse.lil_matrix((len(problem.rows), layout.entries))
    owner = np.full(len(problem.rows), _SEVERAL)
    kept = []
    for i, row in enumerate(problem.rows):
        at = np.searchsorted(problem.bucket, row.buckets).clip(max=layout.entries - 1)
        free = problem.bucket[at] == row.buckets
        line = np.bincount(at[free], row.coefficients[free], minlength=layout.entries)
        moves = np.flatnonzero(line)
        if len(moves):
            kept.append(i)
            matrix[i, moves] = line[moves] * problem.quantity[layout.owner[moves]]
            orders = np.unique(layout.owner[moves])
            owner[i] = orders[0] if len(orders) == 1 else _SEVERAL
        elif not row.lower <= 0.0 <= row.upper:
            raise InfeasibleError(
                f"constraint {row.name!r} asks for {_asked(row)}, but none of its buckets can "
                "trade; drop it, or give it buckets with volume and a cap above 0"
            )
    unit = abs(matrix.tocsr()[kept]).max(axis=1).toarray().ravel() if kept else np.zeros(0)
    return FreeRows(
        tuple(problem.rows[i].name for i in kept),
        sparse.diags(1.0 / unit) @ matrix.tocsr()[kept] if kept else matrix.tocsr()[:0],
        np.array([problem.rows[i].lower for i in kept]) / unit,
        np.array([problem.rows[i].upper for i in kept]) / unit,
        unit,
        owner[kept],
    )


def _asked(row: Row) -> str:
    return f"at least {row.lower:g}" if row.lower > 0.0 else f"at most {row.upper:g}"


def clash(problem: Problem, rows: FreeRows, coupling: Coupling | None = None) -> str | None:
    """Why no schedule keeps all limits, or None if one does.

    Linear programme: least total violation of the rows within caps, ceilings and corridors. The
    rows with a multiplier at its optimum are those that cannot be kept together.
    """
    from scipy import sparse  # noqa: PLC0415
    from scipy.optimize import linprog  # noqa: PLC0415

    buckets, count = problem.layout.entries, len(rows.names)
    hard, most = _hard_limits(problem, coupling)
    over_y = sparse.hstack((sparse.csr_matrix((count, buckets)), rows.matrix), format="csr")
    give = sparse.identity(count, format="csr")
    above, below = np.isfinite(rows.lower), np.isfinite(rows.upper)
    sides = sparse.vstack(
        (
            sparse.hstack((hard, sparse.csr_matrix((hard.shape[0], count)))),
            sparse.hstack((-over_y, -give), format="csr")[above],
            sparse.hstack((over_y, -give), format="csr")[below],
        )
    )
    equality, right = dynamics(problem)
    found = linprog(
        np.concatenate((np.zeros(2 * buckets), np.ones(count))),
        A_ub=sides,
        b_ub=np.concatenate((most, -rows.lower[above], rows.upper[below])),
        A_eq=sparse.hstack((equality, sparse.csr_matrix((len(right), count)))),
        b_eq=right,
        bounds=[(0.0, 1.0)] * buckets
        + [(0.0, cap) for cap in np.minimum(problem.cap, 1.0)]
        + [(0.0, None)] * count,
        method="highs",
    )
    if found.x is None:
        return "caps and ceilings leave no schedule that completes; raise or move one of them"
    if found.fun <= _NO_CLASH:
        return None
    priced = np.abs(found.ineqlin.marginals[len(most) :]) > _PRICED
    guilty = np.concatenate((np.flatnonzero(above), np.flatnonzero(below)))[priced]
    return _in_words(rows, np.unique(guilty), found.x[2 * buckets :])


def _hard_limits(problem: Problem, coupling: Coupling | None) -> tuple[Any, Array]:
    """Ceilings and corridors: matrix (x, y) <= most."""
    from scipy import sparse  # noqa: PLC0415

    buckets, late = problem.layout.entries, due(problem)
    left = picked(late, buckets)
    parts, most = [sparse.hstack((left, -left), format="csr")], [problem.ceiling[late]]
    if coupling is not None:
        level, constant = level_map(coupling, buckets)
        for sign, bound in zip((-1.0, 1.0), coupling.bounds, strict=True):
            finite = np.isfinite(bound)
            parts.append(sign * level[finite])
            most.append(sign * (bound - constant)[finite])
    return sparse.vstack(parts, format="csr"), np.concatenate(most)


def _in_words(rows: FreeRows, guilty: Index, violation: Array) -> str:
    missed = [
        f"{rows.names[i]!r} by {violation[i] * rows.unit[i]:.6g}"
        for i in np.flatnonzero(violation > _NO_CLASH)
    ]
    listed = ", ".join(repr(rows.names[i]) for i in guilty)
    subject = f"constraint {listed} clashes" if len(guilty) == 1 else f"constraints {listed} clash"
    return (
        f"{subject} under the other limits on these orders: at best one misses "
        f"{' and '.join(missed)}; loosen or drop one"
    )
