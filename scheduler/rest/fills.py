"""Fills placed on the orders of a plan: checked, as instants, none of them ever dropped."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InputError, Problem
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.sessions import resolve
from scheduler.tables.draft import Checked
from scheduler.tables.market import ROUND_THE_CLOCK

_COLUMNS = ("order_id", "symbol", "side", "instant", "quantity", "price", "fee")


@dataclass(frozen=True)
class Fills:
    """What has been traded.

    frame : a row a fill: order_id, symbol, side (+1, -1), instant (int64, ns UTC), quantity,
    price (currency a share), fee (currency; NaN: not known).
    """

    frame: pd.DataFrame

    def by_order(self, names: list[str], weight: Array | None = None) -> Array:
        """Shares filled of each order, or the sum of another figure of its fills."""
        value = self.frame["quantity"].to_numpy(dtype=float) if weight is None else weight
        total = pd.Series(value).groupby(self.frame["order_id"].to_numpy()).sum()
        result: Array = total.reindex(names).fillna(0.0).to_numpy(dtype=float)
        return result


def place_fills(
    checked: Checked | None,
    orders: pd.DataFrame,
    *,
    day: date,
    since: dict[str, int],
    at: pd.Timestamp,
) -> Fills:
    """Fills as instants on their orders' clocks.

    Parameters
    ----------
    checked : the fills table; None: nothing has traded.
    orders : rows with order_id, symbol, side, calendar: every order there has been.
    day : the session that times without a date belong to.
    since : by order_id, the instant (ns UTC) before which nothing can have traded.
    at : when the rest is planned.

    Raises:
        InputError: fills of unknown orders, of before the plan or after `at`, repeated ones, and
            fractions of a share where only whole ones trade.
    """
    if checked is None:
        return Fills(pd.DataFrame(columns=list(_COLUMNS)))
    known = orders.drop_duplicates("order_id").set_index("order_id")
    frame = checked.frame.reset_index(drop=True)
    stranger = ~frame["order_id"].isin(known.index).to_numpy()
    problems = checked.problems(
        stranger, "order_id", "is no order of the plan", "remove it, or give its order with orders"
    )
    problems += _repeated(checked)
    if problems:
        raise InputError(problems)
    joined = frame.join(known[["symbol", "side", "calendar"]], on="order_id")
    joined["instant"] = _instants(checked, joined["calendar"].tolist(), day)
    problems = _ill_timed(checked, joined, since, at)
    fraction = (joined["quantity"] % 1.0 != 0.0) & (joined["calendar"] != ROUND_THE_CLOCK)
    problems += checked.problems(
        fraction.to_numpy(), "quantity", "is a fraction of a share", "give whole shares"
    )
    if problems:
        raise InputError(problems)
    return Fills(joined.sort_values("instant", kind="stable")[list(_COLUMNS)])


def notes_on_hours(fills: Fills, book: Book) -> tuple[str, ...]:
    """A note for each order of a plan with fills at times at which it could not trade there."""
    layout, able = book.layout, book.arrays.cap > 0.0
    place = {name: order for order, name in enumerate(book.names)}
    notes = []
    for key, own in fills.frame.groupby("order_id", sort=False):
        name = str(key)
        order = place.get(name)
        if order is None:
            continue
        grid, mine = book.grids[order], able[layout.first[order] : layout.last[order] + 1]
        starts, ends = (side[mine].astype(np.int64) for side in (grid.start, grid.end))
        instant = own["instant"].to_numpy(dtype=np.int64)[:, None]
        inside = ((starts <= instant) & (instant <= ends)).sum(axis=1) > 0
        if not inside.all():
            count = f"{len(own) - int(inside.sum())} of {len(own)} fills"
            notes.append(f"{name}: {count} came outside its hours in the plan; they are counted")
    return tuple(notes)


def _repeated(checked: Checked) -> list[Problem]:
    """A problem for every row that says in each of its cells what an earlier one says."""
    frame = checked.frame
    again = frame.duplicated().to_numpy()
    columns = list(frame.columns)
    group = frame.groupby(columns, dropna=False, sort=False).ngroup().to_numpy()
    first = dict(zip(group[::-1], checked.rows[::-1], strict=True))
    problems: list[Problem] = []
    for at in np.flatnonzero(again).tolist():
        rule = f"repeats row {first[group[at]]} in every cell"
        remedy = "remove one, or tell the two apart by venue or a finer time"
        problems += checked.problems(np.arange(len(frame)) == at, "order_id", rule, remedy)
    return problems


def _instants(checked: Checked, calendars: list[str], day: date) -> NDArray[np.int64]:
    """Each fill's time, ns UTC; texts that come often are resolved once."""
    texts = checked.frame["time"].tolist()
    pairs = list(zip(texts, calendars, strict=True))
    known: dict[tuple[str, str], int] = {}
    problems: list[Problem] = []
    for place, (text, calendar) in enumerate(pairs):
        if (text, calendar) in known:
            continue
        try:
            known[text, calendar] = resolve(text, date=day, calendar=calendar).value
        except InputError as error:
            known[text, calendar] = 0
            (found,) = error.problems
            mask = np.arange(len(texts)) == place
            problems += checked.problems(mask, "time", found.rule, found.remedy)
    if problems:
        raise InputError(problems)
    return np.array([known[pair] for pair in pairs], dtype=np.int64)


def _ill_timed(
    checked: Checked, joined: pd.DataFrame, since: dict[str, int], at: pd.Timestamp
) -> list[Problem]:
    instant = joined["instant"].to_numpy(dtype=np.int64)
    begin = np.array([since[name] for name in joined["order_id"]], dtype=np.int64)
    late = checked.problems(
        instant > at.value,
        "time",
        f"is after {at.isoformat()}, when the rest is planned",
        "remove it, or plan the rest later (at)",
    )
    early = checked.problems(
        instant < begin,
        "time",
        "is before its order's time in the plan begins",
        "remove it: the plan's quantity is what was left then",
    )
    return [*late, *early]
