"""The table of all orders: to sort, to filter, and to pick one from."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from html import escape
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from scheduler.plan import Plan
from scheduler.report.details import certainty
from scheduler.report.lines import at_cap
from scheduler.report.list_parts import Parts
from scheduler.report.markup import MISSING, counted, number, percent, shares

_NUMERIC = ' class="figure"'


@dataclass(frozen=True)
class Order:
    """What a row shows: place in the plan, the summary's row, parts of the list, full buckets."""

    place: int
    name: str
    row: dict[str, Any]
    cost_part: float
    risk_part: float
    capped: int
    capped_auctions: int
    notes: int

    @property
    def high(self) -> float:
        return float(1e4 * self.row["quantiles"]["0.95"] / self.row["notional"])

    @property
    def at_caps(self) -> str:
        """Full buckets and, of these, auctions."""
        if not self.capped_auctions:
            return str(self.capped or "")
        words = counted(self.capped_auctions, "auction")
        return words if self.capped == self.capped_auctions else f"{self.capped}, {words}"


Text: TypeAlias = Callable[[Order], str]
Value: TypeAlias = Callable[[Order], float | None]


@dataclass(frozen=True)
class Column:
    """A heading, the text of a cell and, of a figure, what it is sorted by."""

    heading: str
    text: Text
    value: Value | None = None

    def head(self, sorted_by: str) -> str:
        how = "descending" if self.heading == sorted_by else "none"
        return (
            f'<th scope="col" aria-sort="{how}"{_NUMERIC if self.value else ""}>'
            f'<button type="button">{escape(self.heading)}</button></th>'
        )

    def cell(self, order: Order) -> str:
        text = escape(self.text(order))
        if self.value is None:
            return f"<td>{text}</td>"
        value = self.value(order)
        known = "" if value is None or np.isnan(value) else f"{value:.12g}"
        return f'<td{_NUMERIC} data-value="{known}">{text}</td>'


def _amount(heading: str, key: str, digits: int = 0) -> Column:
    return Column(heading, lambda o: number(o.row[key], digits), lambda o: o.row[key])


def _urgency(order: Order) -> str:
    urgency = order.row["urgency"]
    return MISSING if urgency is None else f"{urgency:.4g}"


_START = (
    Column("Symbol", lambda o: o.row["symbol"]),
    Column("Side", lambda o: o.row["side"]),
    Column("Shares", lambda o: shares(o.row["quantity"]), lambda o: o.row["quantity"]),
    _amount("Notional", "notional"),
    _amount("Cost, bps", "expected_cost_bps", 2),
    _amount("Cost", "expected_cost"),
)
_NOTES = Column("Notes", lambda o: str(o.notes or ""), lambda o: o.notes)
ALONE = (
    *_START,
    _amount("Risk, bps", "cost_std_bps", 2),
    Column("95 % below, bps", lambda o: number(o.high, 2), lambda o: o.high),
    Column("Urgency", _urgency, lambda o: o.row["urgency"]),
    Column(
        "Undone",
        lambda o: shares(round(o.row["residual"])) if o.row["residual"] else "",
        lambda o: o.row["residual"],
    ),
    Column("Optimum", lambda o: certainty(o.row["certificate"])),
    _NOTES,
)
COST_PART = "Part of cost"
TOGETHER = (
    *_START,
    Column(COST_PART, lambda o: percent(o.cost_part), lambda o: o.cost_part),
    _amount("Risk alone, bps", "cost_std_bps", 2),
    Column("Part of risk", lambda o: percent(o.risk_part), lambda o: o.risk_part),
    Column("At caps", lambda o: o.at_caps, lambda o: o.capped),
    _NOTES,
)

COLUMNS = (
    " Part of cost and part of risk: of the list's expected cost and of its variance; a part of "
    "the risk below zero offsets others. Risk alone: as if no others were there. At caps: buckets."
)


def orders_table(plan: Plan, notes: dict[str, list[str]], parts: Parts | None) -> str:
    """One row an order; of a list, those that cost most come first."""
    columns, sorted_by = (ALONE, "") if parts is None else (TOGETHER, COST_PART)
    first = '<th scope="col" aria-sort="none"><button type="button">Order</button></th>'
    head = first + "".join(column.head(sorted_by) for column in columns)
    orders = _orders(plan, notes, parts)
    if parts is not None:
        orders.sort(key=lambda order: -np.nan_to_num(order.cost_part))
    body = "".join(_row(order, columns) for order in orders)
    return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


def _orders(plan: Plan, notes: dict[str, list[str]], parts: Parts | None) -> list[Order]:
    layout, capped = plan.book.layout, at_cap(plan)
    auction = np.concatenate([grid.auction for grid in plan.book.grids])
    none = np.full(len(plan.book.names), np.nan)
    columns = zip(
        plan.summary["orders"].items(),
        (none if parts is None else parts.cost).tolist(),
        (none if parts is None else parts.risk).tolist(),
        _counts(layout.sum(capped.astype(float))),
        _counts(layout.sum((capped & auction).astype(float))),
        strict=True,
    )
    return [
        Order(place, name, row, cost, risk, full, auctions, len(notes.get(name, ())))
        for place, ((name, row), cost, risk, full, auctions) in enumerate(columns)
    ]


def _counts(values: NDArray[np.float64]) -> list[int]:
    counts: list[int] = values.astype(int).tolist()
    return counts


def _row(order: Order, columns: tuple[Column, ...]) -> str:
    kinds = ["capped"] * (order.capped > 0)
    kinds += ["capped-continuous"] * (order.capped > order.capped_auctions)
    name = escape(order.name)
    pick = f'<button type="button" class="pick">{name}</button>'
    cells = "".join(column.cell(order) for column in columns)
    return (
        f'<tr data-order="{order.place}" class="{" ".join(kinds)}">'
        f'<th scope="row" data-value="{name}">{pick}</th>{cells}</tr>'
    )
