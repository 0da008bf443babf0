"""Orders and fills added up: by side, size, participation, group of symbols and time of day."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd

from scheduler.model.ragged import Array
from scheduler.shortfall.parts import EXECUTION, PARTS

_SIZES = (0.01, 0.05, 0.20)
_PARTICIPATIONS = (0.05, 0.10, 0.20)
"""Edges of the classes of quantity over ADV, and of own over total volume (our choice)."""

_SUMS = ("notional", "traded_value", *PARTS, "shortfall", "cost", "expected_cost", "flagged")


def groups_frame(orders: pd.DataFrame, fills: pd.DataFrame) -> pd.DataFrame:
    """A row a way of grouping and group; parts in bps of the notional, costs of what traded.

    Of the time of day both are of what traded at that time.
    """
    classes = {
        "side": orders["side"],
        "size": _classes(orders["size"].to_numpy(dtype=float), _SIZES, "of ADV"),
        "participation": _classes(
            orders["share_of_volume"].to_numpy(dtype=float), _PARTICIPATIONS, "of volume"
        ),
        "group": orders["group"],
    }
    rows = [row for by, names in classes.items() for row in _by(orders, by, names)]
    rows += _by_hour(fills)
    columns = ["by", "group", "orders", "notional", *(f"{part}_bps" for part in PARTS)]
    columns += ["shortfall_bps", "cost_bps", "expected_bps", "mean_z", "flagged"]
    return pd.DataFrame(rows, columns=columns)


def _classes(values: Array, edges: tuple[float, ...], of: str) -> pd.Series[Any]:
    """Each value's class in words; none of what is not known."""
    shown = [f"{100 * edge:g} %" for edge in edges]
    between = [f"{low}–{high}" for low, high in pairwise(shown)]
    words = [f"up to {shown[0]}", *between, f"above {shown[-1]}"]
    at = np.searchsorted(np.array(edges), values, side="left")
    named = pd.Series([f"{words[k]} {of}" for k in at.tolist()])
    return named.where(~np.isnan(values))


def _by(orders: pd.DataFrame, by: str, names: pd.Series[Any]) -> list[dict[str, Any]]:
    """Groups in the order in which their names first come, classes from small to large."""
    rows = []
    keys = names.to_numpy(dtype=object)
    for name in _in_order(by, names):
        mine = orders[keys == name]
        total = {key: float(mine[key].sum()) for key in _SUMS}
        unknown = bool(mine["timing"].isna().all())
        bps, traded = 1e4 / total["notional"], total["traded_value"]
        rows.append(
            {"by": by, "group": name, "orders": len(mine), "notional": total["notional"]}
            | {f"{part}_bps": bps * total[part] for part in PARTS}
            | ({"timing_bps": np.nan} if unknown else {})
            | {"shortfall_bps": bps * total["shortfall"]}
            | {
                f"{short}_bps": 1e4 * total[key] / traded if traded else np.nan
                for short, key in (("cost", "cost"), ("expected", "expected_cost"))
            }
            | {"mean_z": float(mine["z"].mean()), "flagged": int(total["flagged"])}
        )
    return rows


def _in_order(by: str, names: pd.Series[Any]) -> list[str]:
    found = names.dropna().unique().tolist()
    ranks = {"up": 0, "above": 2}
    if by in ("size", "participation"):
        found.sort(key=lambda name: (ranks.get(name.split()[0], 1), _first_number(name)))
    return found


def _first_number(words: str) -> float:
    return float(next(part for part in words.replace("up to ", "").split() if part[0].isdigit()))


def _by_hour(fills: pd.DataFrame) -> list[dict[str, Any]]:
    """Execution by the local hour in which a fill's bucket begins."""
    rows = []
    hours = fills["bucket_start"].str[11:13]
    for hour, mine in fills.groupby(hours, sort=True):
        value = float(mine["value"].sum())
        total = {part: float(mine[f"{part}_cost"].sum()) for part in EXECUTION}
        total["explicit"] = float(mine["explicit_cost"].sum())
        cost = sum(total.values())
        unknown = bool(mine["timing_cost"].isna().all())
        rows.append(
            {
                "by": "time of day",
                "group": f"{hour}:00",
                "orders": int(mine["order_id"].nunique()),
                "notional": value,
            }
            | {f"{part}_bps": 1e4 * amount / value for part, amount in total.items()}
            | ({"timing_bps": np.nan} if unknown else {})
            | {
                "cost_bps": 1e4 * cost / value,
                "expected_bps": 1e4 * float(mine["expected_cost"].sum()) / value,
            }
        )
    return rows
