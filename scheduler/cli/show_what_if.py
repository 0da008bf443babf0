"""A grid of scenarios in a terminal: knees, worst regrets, and the rows if they are few."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

from scheduler.cli.show import aligned

if TYPE_CHECKING:
    import pandas as pd

    from scheduler.what_if import WhatIf

_FEW = 40  # rows shown one by one
_MOST = 20  # knees and regrets shown


def what_if_text(result: WhatIf) -> str:
    """All that a reader needs at the terminal."""
    summary, grid = result.summary, result.grid
    counts = ", ".join(f"{count:,} {status}" for status, count in summary["status"].items())
    shape = " x ".join(f"{len(values)} {name}" for name, values in grid.axes.items())
    orders = len(result.book.names)
    head = (
        f"Session {summary['date']}, planned as of {summary['at']}\n"
        f"{len(grid):,} points ({shape}) and the base, {orders:,} orders: {counts}"
    )
    blocks = [head, *_knees(result), *_regrets(result)]
    if len(result.table) <= _FEW:
        blocks.append(_rows(result))
    return "\n\n".join(blocks)


def _knees(result: WhatIf) -> Iterator[str]:
    """A line a frontier, those near the base first: its knee, the price of risk either side."""
    aim, near, places = result.grid.aim, result.near_base, _places(result)
    found = sorted(
        result.frontiers,
        key=lambda line: (line.away(near[line.order_id]), places[line.order_id]),
    )
    if aim is None or not found:
        return
    others = [name for name in result.grid.axes if name != aim]
    header = ["order", *others, f"knee at {aim}", "cost bps", "risk bps"]
    header += ["a bp of risk costs, before", "and beyond"]
    rows = [
        [
            line.order_id,
            *(_value(line.values[name]) for name in others),
            *(
                ["none", "", "", "", ""]
                if line.knee is None or line.prices is None
                else [
                    f"{line.aim[line.knee]:.4g}",
                    f"{line.cost[line.knee]:.2f}",
                    f"{line.risk[line.knee]:.2f}",
                    *(f"{price:.2g}" for price in line.prices),
                ]
            ),
        ]
        for line in found[:_MOST]
    ]
    yield aligned(header, rows, left=1) + _more(len(found), "frontiers")


def _regrets(result: WhatIf) -> Iterator[str]:
    """A line an order: the world in which its base schedule loses most, at about its own aim."""
    axes = list(result.grid.axes)
    columns = ["point", "order_id", *axes, "regret_bps", "regret"]
    found = [
        row
        for rows in result.table.by_orders(columns)
        for row in _worst(result, rows).to_dict("records")
    ]
    if not found:
        return
    places = _places(result)
    found.sort(key=lambda row: places[row["order_id"]])
    header = ["order", *axes, "worst regret bps", f"regret {result.book.currency}".rstrip()]
    rows = [
        [
            row["order_id"],
            *(_value(row[name]) for name in axes),
            f"{row['regret_bps']:.2f}",
            f"{row['regret']:,.0f}",
        ]
        for row in found[:_MOST]
    ]
    yield aligned(header, rows, left=1) + _more(len(found), "orders")


def _places(result: WhatIf) -> dict[str, int]:
    return {name: place for place, name in enumerate(result.book.names)}


def _worst(result: WhatIf, rows: pd.DataFrame) -> pd.DataFrame:
    """Of each order its row of most regret, at about its own aim."""
    aim = result.grid.aim
    known = rows[rows["regret_bps"].notna() & (rows["point"] > 0)]
    if aim is not None:
        known = known[known[aim] == known["order_id"].map(_own_aims(result))]
    return known.loc[known.groupby("order_id")["regret_bps"].idxmax()]


def _own_aims(result: WhatIf) -> dict[str, Any]:
    """The aim of the grid that is nearest to each order's own."""
    return {name: near[result.grid.aim or ""] for name, near in result.near_base.items()}


def _rows(result: WhatIf) -> str:
    frame = result.scenarios
    axes = list(result.grid.axes)
    header = ["order", *axes, "cost bps", "risk bps", "half done", "last trade", "regret bps"]
    header += ["excess shares", "optimum"]
    rows = [
        [
            row["order_id"],
            *("base" if row["point"] == 0 else _value(row[name]) for name in axes),
            *(_number(row[name], 2) for name in ("expected_cost_bps", "cost_std_bps")),
            *(_clock(row[name]) for name in ("half_done", "last_trade")),
            _number(row["regret_bps"], 2),
            _number(row["excess_shares"], 0),
            row["status"],
        ]
        for row in frame.to_dict("records")
    ]
    return aligned(header, rows, left=1)


def _value(value: Any) -> str:
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def _number(value: float, digits: int) -> str:
    return "" if value != value else f"{value:,.{digits}f}"  # noqa: PLR0124 - NaN


def _clock(text: Any) -> str:
    return text[5:16].replace("T", " ") if isinstance(text, str) else ""


def _more(count: int, word: str) -> str:
    return f"\n... and {count - _MOST} more {word}" if count > _MOST else ""
