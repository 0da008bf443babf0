"""A review at the terminal."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from scheduler.cli.show import aligned
from scheduler.review import Review
from scheduler.shortfall.parts import PARTS, part_words

_SHOWN = 40  # orders; those flagged come first where there are more
_NONE = "-"


def review_text(result: Review) -> str:
    """Shortfalls and their parts, outcomes beside the promise, the list as a whole."""
    frame = result.orders
    if len(frame) > _SHOWN:
        frame = frame.sort_values("chance", kind="stable").head(_SHOWN)
    currency = result.summary["currency"]
    blocks = [f"Session {result.summary['date']}", _parts(frame), _outcomes(frame, currency)]
    if len(result.orders) > _SHOWN:
        blocks.append(f"{len(result.orders) - _SHOWN:,} more, likelier ones, are not shown")
    blocks.append(_total(result.summary, currency))
    return "\n\n".join(blocks)


def _parts(frame: pd.DataFrame) -> str:
    """The parts of each shortfall, bps of the paper value."""
    header = ["order", "side", "symbol", "done", *PARTS, "shortfall bps"]
    rows = []
    for row in frame.to_dict("records"):
        bps = 1e4 / row["notional"]
        cells = [_number(bps * row[part], 2) for part in PARTS]
        done = f"{row['traded'] / row['quantity']:.0%}"
        label = (row["order_id"], row["side"], row["symbol"], done)
        rows.append((*label, *cells, _number(row["shortfall_bps"], 2)))
    return aligned(header, rows, left=3)


def _outcomes(frame: pd.DataFrame, currency: str) -> str:
    """What traded cost, and its place in the law it is held against."""
    header = ["order", "held against", f"cost {currency}".strip(), "expected", "st. dev.", "z"]
    header += ["quantile", "chance adj.", "vwap bps", "twap bps", "close bps", "verdict"]
    rows = []
    for row in frame.to_dict("records"):
        money = (_number(row[name], 0) for name in ("cost", "expected_cost", "cost_std"))
        place = (_number(row["z"], 2, sign=True), _percent(row["quantile"]))
        against = (_number(row[f"against_{name}_bps"], 2) for name in ("vwap", "twap", "close"))
        rows.append(
            (
                row["order_id"],
                row["held_against"] or _NONE,
                *money,
                *place,
                _percent(row["adjusted_chance"]),
                *against,
                row["verdict"],
            )
        )
    return aligned(header, rows, left=2)


def _total(summary: dict[str, Any], currency: str) -> str:
    total = summary["total"]
    parts = ", ".join(
        f"{part_words(name, total)} {_number(total[name], 0)}"
        for name in PARTS
        if total[name] is not None
    )
    flagged = f"{total['flagged']} of {total['orders']} flagged"
    rate = f"{summary['asked']['false_alarms']:.3g} of false alarms in the whole list"
    lines = [
        f"Shortfall {_number(total['shortfall'], 0)} {currency}".rstrip()
        + f", {_number(total['shortfall_bps'], 2)} bps of {total['notional']:,.0f}: {parts}",
        f"{flagged}, at a chance of {rate} (chances are adjusted for their number)",
    ]
    if "z" in total:
        lines.append(
            f"The list cost {_number(total['cost'], 0)}, expected were "
            f"{_number(total['expected_cost'], 0)}: z {_number(total['z'], 2, sign=True)}, "
            f"quantile {_percent(total['quantile'])} of its promised law"
        )
    return "\n".join(lines)


def _number(value: float | None, digits: int, *, sign: bool = False) -> str:
    if value is None or not np.isfinite(value):
        return _NONE
    return f"{value:{'+' if sign else ''},.{digits}f}"


def _percent(value: float | None) -> str:
    return _NONE if value is None or not np.isfinite(value) else f"{value:.1%}"
