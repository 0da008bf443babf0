"""The corridors table: bounds on cash, and on what is still to trade, through the day.

With s the side, p the price, fx base currency per unit, Q the quantity and x what is left of it:
`cash` is the sum of s p fx (Q - x), bought minus sold; `gross` that of p fx x; `net` that of
s p fx x; `factor:NAME` that of b s p fx x with b the exposures to a factor; `group:NAME` the net
of a group of the market table.

Canonical frame, text as it may be read again: `kind`; `lower` and `upper` (an amount of base
currency, or with % a share of the sum of p fx Q; None: no limit); `from` and `to` (canonical
text of `tables.times`; None: all day). `limits` gives the numbers.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.tables.cells import CellError, identifier
from scheduler.tables.columns import NUMBER, Words, why_no_number
from scheduler.tables.draft import Draft, Table, gates
from scheduler.tables.source import cell_text
from scheduler.tables.times import is_empty_window, moment

PLAIN = ("cash", "gross", "net")
NAMED = ("factor", "group")
MOST = 1e18
"""Amounts beyond this are no money."""


def _kind(text: str) -> str:
    head, colon, name = text.strip().partition(":")
    head = head.strip().lower()
    if not colon and head in PLAIN:
        return head
    if colon and head in NAMED and name.strip():
        return f"{head}:{identifier(name.strip())}"
    raise CellError("is no kind of corridor", "write cash, gross, net, factor:NAME or group:NAME")


def _amount(text: str) -> str:
    cell = text.strip()
    digits = cell.removesuffix("%").rstrip()
    if not re.fullmatch(NUMBER, digits):
        raise why_no_number(digits)
    if abs(float(digits)) > MOST:
        raise CellError("is too large for an amount", "check it")
    return cell_text(float(digits)) + ("%" if cell.endswith("%") else "")


_AMOUNT = "amount of base currency, or as in 5% of all that is to be traded"
_MOMENT = "HH:MM, local date-time, or date-time with offset (ISO 8601)"

TABLE = Table(
    "corridors",
    (
        Words("kind", "cash, gross, net, factor:NAME or group:NAME", required=True, parse=_kind),
        Words("lower", _AMOUNT, empty="no limit", parse=_amount),
        Words("upper", _AMOUNT, empty="no limit", parse=_amount),
        Words("from", _MOMENT, empty="all day", parse=moment),
        Words("to", _MOMENT, empty="all day", parse=moment),
    ),
    unique=("kind", "from", "to"),
)


@dataclass(frozen=True)
class Limits:
    """Corridors as arrays, row by row (R,).

    measure : cash, gross, net, factor or group. name : of the factor or group, else ''.
    lower, upper : (R,) base currency, infinite where there is no limit.
    """

    measure: tuple[str, ...]
    name: tuple[str, ...]
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]


def limits(corridors: pd.DataFrame, notional: float) -> Limits:
    """The numbers of a canonical frame; `notional` is the sum of p fx Q, base currency."""
    parts = [kind.partition(":") for kind in corridors["kind"]]
    return Limits(
        measure=tuple(measure for measure, _, _ in parts),
        name=tuple(name for _, _, name in parts),
        lower=np.array([_money(cell, notional, -np.inf) for cell in corridors["lower"]]),
        upper=np.array([_money(cell, notional, np.inf) for cell in corridors["upper"]]),
    )


def _money(cell: str | None, notional: float, none: float) -> float:
    if cell is None:
        return none
    return float(cell[:-1]) / 100 * notional if cell.endswith("%") else float(cell)


def _check_sides(draft: Draft) -> None:
    """At least one side; lower not above upper; what is left to trade is never negative.

    Amounts and percentages are compared where the orders are known.
    """
    frame, cells = draft.frame, draft.raw.cells
    given = [cells[name] != "" for name in ("lower", "upper") if name in cells]
    bare = ~np.any(given, axis=0) if given else np.ones(len(frame), np.bool_)
    draft.flag(bare, "lower", "has no limit on either side", "fill in lower or upper")
    for at, (lower, upper) in enumerate(zip(frame["lower"], frame["upper"], strict=True)):
        alike = lower and upper and lower.endswith("%") == upper.endswith("%")
        if alike and _money(lower, 1.0, 0.0) > _money(upper, 1.0, 0.0):
            draft.flag_row(at, "lower", f"is above upper, {upper}", "exchange the two")
    negative = (frame["kind"] == "gross") & frame["upper"].str.startswith("-").eq(True)
    remedy = "what is left to trade is never negative: give 0 or more"
    draft.flag(negative.to_numpy(), "upper", "is below 0, though gross cannot be", remedy)


def _check_windows(draft: Draft) -> None:
    for at, (begin, end) in enumerate(zip(draft.frame["from"], draft.frame["to"], strict=True)):
        if begin is not None and end is not None and is_empty_window(begin, end):
            draft.flag_row(at, "to", "is not after from", "give a time later than from")


ensure, read_corridors = gates(TABLE, _check_sides, _check_windows)
