"""The constraints table as rows on the slices of a book, and what whole lots do to them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scheduler.errors import InputError, MisuseError
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.problem import Row
from scheduler.sessions import Kind
from scheduler.settings import Settings
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs

_KEPT = 1e-6  # of the most that a constraint's sum could be: what the solver itself may miss it by


def check_solver(settings: Settings) -> None:
    """Refuse constraints with a solver that does not know them."""
    if settings.plan.solver != "conic":
        raise MisuseError(
            "only the conic solver keeps constraints; add --solver conic, or leave them out"
        )


def with_constraints(book: Book, inputs: Inputs) -> Book:
    """The book with the constraints as rows of its orders.

    Raises:
        InputError: buckets that an order does not have; orders that share a symbol.
        MisuseError: an order with min_slice, which is found by a search that knows no constraints.
    """
    if inputs.constraints is None:
        return book
    if (book.min_slice > 0.0).any():
        raise MisuseError("min_slice and constraints exclude each other; leave one of them out")
    frame = inputs.constraints.frame
    shared = book.rows["symbol"].duplicated(keep=False)
    mixed = frame["order_id"].isin(book.rows.loc[shared, "order_id"]).to_numpy()
    if mixed.any():
        rule = "is of an order that is solved as one total with others of its symbol"
        remedy = "combine them into one order, or leave the constraint out"
        raise InputError(inputs.constraints.problems(mixed, "order_id", rule, remedy))
    stage = _stages(book, inputs.constraints)
    coefficient = frame["coefficient"].to_numpy(dtype=float)
    lower = frame["lower"].fillna(-np.inf).to_numpy(dtype=float)
    upper = frame["upper"].fillna(np.inf).to_numpy(dtype=float)
    rows = tuple(
        Row(str(name), stage[at], coefficient[at], float(lower[at[0]]), float(upper[at[0]]))
        for name, at in frame.groupby("name", sort=False).indices.items()
    )
    return replace(book, arrays=replace(book.arrays, rows=rows))


def _stages(book: Book, constraints: Checked) -> Index:
    """The stage of each row of the table, counted through all orders."""
    frame = constraints.frame
    open_ = np.flatnonzero(book.kind != Kind.CLOSED)
    count = np.bincount(book.layout.owner[open_], minlength=len(book.names))
    first = np.cumsum(count) - count
    place = {name: order for order, name in enumerate(book.names)}
    order = np.array([place[name] for name in frame["order_id"]], dtype=np.int64)
    bucket = frame["bucket"].to_numpy(dtype=float)
    problems = [
        problem
        for beyond in np.unique(order[bucket > count[order]])
        for problem in constraints.problems(
            (order == beyond) & (bucket > count[beyond]),
            "bucket",
            f"is beyond the {count[beyond]} buckets of order {book.names[beyond]}",
            "count them in the schedule of the plan without constraints",
        )
    ]
    if problems:
        raise InputError(problems)
    result: Index = open_[first[order] + bucket.astype(np.int64) - 1]
    return result


def notes_on_constraints(book: Book, shares: Array) -> list[str]:
    """Constraints that whole lots break: they are kept before rounding."""
    notes = []
    for row in book.arrays.rows:
        quantity = book.arrays.quantity[book.layout.owner[row.buckets]]
        excess = row.excess(shares)
        if excess > _KEPT * float((np.abs(row.coefficients) * quantity).max()):
            notes.append(f"constraint {row.name}: whole lots miss it by {excess:.6g}")
    return notes
