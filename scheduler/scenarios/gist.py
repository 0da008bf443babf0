"""What a table of scenarios says in short: the summary of a grid, ready for JSON."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from importlib.metadata import version
from typing import Any

import pandas as pd

from scheduler.scenarios.axes import Grid
from scheduler.scenarios.knee import SOLVED, Frontier
from scheduler.scenarios.study import Study
from scheduler.scenarios.table import Table
from scheduler.summary import CAUTION

LISTED = 20_000
"""Points beyond which their totals are left out of the summary."""

_TOTALS = ("expected_cost", "objective", "regret", "excess_shares")


def digest(
    study: Study, table: Table, found: Sequence[Frontier], notes: Sequence[str]
) -> dict[str, Any]:
    """The summary: what was asked, totals by point, the knees of frontiers."""
    base, grid = study.base, study.grid
    counts: Counter[str] = Counter()
    points: list[dict[str, Any]] = []
    for rows in table.by_points(["point", "status", *_TOTALS]):
        counts.update(rows["status"].tolist())
        if table.points <= LISTED:
            points += _totals(rows, grid)
    return {
        "schema": 1,
        "version": version("headrace"),
        "date": base.date.isoformat(),
        "at": None if base.at is None else base.at.isoformat(),
        "currency": base.currency,
        "caution": CAUTION,
        "grid": {name: list(values) for name, values in grid.axes.items()},
        "status": dict(counts.most_common()),
        "base": table.at("point", 0).to_dict("records"),
        "points": points,
        "knees": [_knee(line, grid) for line in found],
        "settings": base.settings.as_dict(),
        "inputs": dict(base.inputs),
        "notes": list(notes),
    }


def _totals(rows: pd.DataFrame, grid: Grid) -> Iterator[dict[str, Any]]:
    """A point's values, its sums over the orders, and how many have no schedule."""
    totals = rows.groupby("point", sort=True)[list(_TOTALS)].sum(min_count=1)
    without = (~rows["status"].isin(SOLVED)).groupby(rows["point"]).sum()
    for point, *sums in totals.itertuples():
        values = dict(zip(_TOTALS, sums, strict=True))
        yield {
            "point": point,
            **grid.at(point),
            **values,
            "without_schedule": int(without[point]),
        }


def _knee(line: Frontier, grid: Grid) -> dict[str, Any]:
    found: dict[str, Any] = {"order_id": line.order_id, **line.values}
    if line.knee is not None:
        assert grid.aim is not None
        found[grid.aim] = float(line.aim[line.knee])
        found["expected_cost_bps"] = float(line.cost[line.knee])
        found["cost_std_bps"] = float(line.risk[line.knee])
    return {**found, "meaning": line.words}
