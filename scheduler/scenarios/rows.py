"""The table of scenarios: one row a point and order."""

from __future__ import annotations

from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.model.ragged import Array, Index
from scheduler.scenarios.axes import Grid
from scheduler.scenarios.stack import UNSOLVED, Solved, Stack
from scheduler.sessions import local_texts

INFEASIBLE = "infeasible"
_SESSIONS = 3  # beyond, the expected shortfall would cost more than the schedule
_NUMBERS = (
    *("expected_cost", "expected_cost_bps", "cost_std", "cost_std_bps"),
    *("expected_shortfall_95", "objective", "risk_aversion", "first_bucket_share"),
)
_AFTER = ("residual", "regret", "regret_bps", "excess_shares")
_TEXTS = ("half_done", "last_trade")
FIGURES = (*_NUMBERS, *_TEXTS, *_AFTER)
"""Columns of figures, empty in rows without a schedule."""


def scenario_rows(stack: Stack, solved: Solved, *, regret: Array, excess: Array) -> pd.DataFrame:
    """Figures of solved rows, before whole lots; base currency, bps of notional.

    `expected_cost_bps` alone is of what trades. `half_done` is when half of what trades is done,
    `last_trade` the end of the bucket after which less than half a lot is left of it.
    """
    figures = Figures(stack.orders, stack.charges, solved.shares)
    std, bps = figures.cost_std, 1e4 / figures.notional
    orders, layout = stack.orders, stack.orders.stages.layout
    first = layout.first + _first(stack, orders.cap > 0.0)
    safe = np.where(std > 0.0, std, np.inf)
    half, last = _times(stack, figures)
    columns = {
        "point": stack.point,
        "order": stack.order,
        "status": solved.status,
        "expected_cost": figures.expected_cost,
        "expected_cost_bps": figures.cost_bps,
        "cost_std": std,
        "cost_std_bps": bps * std,
        "expected_shortfall_95": figures.shortfall(most_sessions=_SESSIONS),
        "objective": figures.objective,
        "risk_aversion": orders.risk_aversion + 0.5 * orders.urgency / safe,
        "first_bucket_share": solved.shares[first] / orders.quantity,
        "half_done": half,
        "last_trade": last,
        "residual": figures.residual,
        "regret": regret,
        "regret_bps": bps * regret,
        "excess_shares": excess,
    }
    frame = pd.DataFrame(columns)
    frame.loc[frame["status"] == UNSOLVED, list(_NUMBERS + _AFTER)] = np.nan
    frame.loc[frame["status"] == UNSOLVED, list(_TEXTS)] = None
    return frame


def all_rows(found: pd.DataFrame | None, points: Index, grid: Grid, base: Book) -> pd.DataFrame:
    """Rows of all points and the base's orders, labelled; what was not found is infeasible."""
    count = len(base.names)
    point, order = np.repeat(np.sort(points), count), np.tile(np.arange(count), len(points))
    keys = pd.MultiIndex.from_arrays([point, order])
    if found is None:
        figures = pd.DataFrame(index=keys, columns=["status", *FIGURES], dtype=float)
        figures = figures.astype(dict.fromkeys(("status", *_TEXTS), object))
    else:
        figures = found.set_index(["point", "order"]).reindex(keys)
    figures = figures.reset_index(drop=True)
    labels = {
        "point": point,
        **{name: grid.column(name, point) for name in grid.axes},
        "order_id": base.rows["order_id"].to_numpy()[order],
        "symbol": base.rows["symbol"].to_numpy()[order],
        "status": figures["status"].where(figures["status"].notna(), INFEASIBLE),
    }
    return pd.DataFrame({**labels, **{name: figures[name] for name in FIGURES}})


def _first(stack: Stack, mask: np.ndarray) -> Index:
    """(R,) the first stage of each row where the mask holds, from 0 within the row."""
    layout = stack.orders.stages.layout
    place = np.where(mask, np.arange(layout.entries), layout.entries).astype(float)
    found: Index = np.minimum(layout.min(place), layout.last).astype(np.int64) - layout.first
    return found


def _times(stack: Stack, figures: Figures) -> tuple[list[str], list[str]]:
    """When half is done, within its bucket, and the end of the last bucket that matters."""
    layout, shares = stack.orders.stages.layout, figures.shares
    owner = layout.owner
    lot = np.concatenate([part.book.lot[part.place] for part in stack.parts])
    done, total = layout.cumsum(shares), figures.traded
    middle = _first(stack, done >= 0.5 * total[owner])
    at = layout.first + middle
    slice_ = np.where(shares[at] > 0.0, shares[at], 1.0)
    within = np.clip(1.0 - (done[at] - 0.5 * total) / slice_, 0.0, 1.0)
    last = _first(stack, done > (total - 0.5 * np.minimum(lot, total))[owner])
    half_texts: list[str] = []
    last_texts: list[str] = []
    for (part, k), (_, share), (_, end) in zip(
        stack.by_part(middle), stack.by_part(within), stack.by_part(last), strict=True
    ):
        first = part.book.layout.first[part.place]
        start, stop = (_instants(part.book, name) for name in ("start", "end"))
        begun = start[first + k]
        moment = begun + np.round(share * (stop[first + k] - begun) / 1e9).astype(np.int64) * 10**9
        zones = np.array([grid.timezone for grid in part.book.grids])[part.place]
        half_texts += _texts(moment, zones)
        last_texts += _texts(stop[first + end], zones)
    return half_texts, last_texts


def _instants(book: Book, name: str) -> Index:
    return np.concatenate([getattr(grid, name) for grid in book.grids]).astype(np.int64)


def _texts(instants: Index, zones: np.ndarray) -> list[str]:
    """Local ISO 8601 texts; each instant is written once."""
    result = np.empty(len(instants), dtype=object)
    for zone in np.unique(zones):
        mine = np.flatnonzero(zones == zone)
        values, back = np.unique(instants[mine], return_inverse=True)
        result[mine] = np.array(local_texts(values.tolist(), ZoneInfo(str(zone))), dtype=object)[
            back
        ]
    texts: list[str] = result.tolist()
    return texts
