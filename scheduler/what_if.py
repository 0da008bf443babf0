"""The verb `what-if`: the same orders over a grid of choices and worlds."""

from __future__ import annotations

import datetime
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from importlib import import_module
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scheduler.errors import InputError, MisuseError
from scheduler.intake import Book, Finish
from scheduler.plan import asked_finish, check_aim, session_day, solver_of
from scheduler.scenarios import (
    SOLVED,
    Frontier,
    Grid,
    Parts,
    Recipe,
    Study,
    Value,
    Values,
    fingerprints,
    frontiers,
    near_base,
    read_grid,
)
from scheduler.settings import DEFAULTS, Settings
from scheduler.solve.schedule import Progress
from scheduler.summary import CAUTION
from scheduler.tables.inputs import Inputs, read_inputs
from scheduler.tables.source import Source
from scheduler.tables.write import check_not_over, write_files

_FILES = ("scenarios.csv", "scenarios.parquet", "summary.json", "report.html")
ROUNDING = "Figures are before whole lots and min_slice, which would add noise to what is compared."


@dataclass(frozen=True)
class WhatIf:
    """A grid of scenarios.

    scenarios : one row a point and order; point 0 is the base. summary : ready for JSON.
    frontiers : points that share everything but the aim, order by order.
    notes : what the user should know. study : what solves a point anew.
    """

    scenarios: pd.DataFrame
    summary: dict[str, Any]
    frontiers: tuple[Frontier, ...] = field(repr=False)
    notes: tuple[str, ...]
    study: Study = field(repr=False)

    @property
    def grid(self) -> Grid:
        return self.study.grid

    @property
    def book(self) -> Book:
        """The orders of the base."""
        return self.study.base

    @cached_property
    def near_base(self) -> dict[str, dict[str, Value]]:
        """Of every order the value of each axis that is nearest to the base's, by order_id."""
        return dict(zip(self.book.names, near_base(self.study), strict=True))

    def figure(self, name: str, order_id: str | None = None) -> Any:
        """A chart, `frontier` or `regret`, of one order (the first, if not named), by plotly.

        Raises:
            MisuseError: no such chart or order. MissingExtraError: plotly is not installed.
        """
        return import_module("scheduler.report.what_if_figures").figure(self, name, order_id)

    def write(self, directory: str | Path, *, report: bool = False, parquet: bool = False) -> None:
        """Write scenarios, summary and, if asked for, the report page: all of them or nothing."""
        table = f"scenarios.{'parquet' if parquet else 'csv'}"
        files: dict[str, Any] = {table: self.scenarios, "summary.json": self.summary}
        if report:
            files["report.html"] = import_module("scheduler.report.what_if_page").page(self)
        check_not_over(self.book.inputs.values(), directory, (*files, *_FILES))
        write_files(directory, files, instead_of=_FILES)


def what_if(
    orders: Source,
    market: Source,
    *,
    grid: Mapping[str, Values],
    profiles: Source | None = None,
    readings: Source | None = None,
    exposures: Source | None = None,
    factor_covariance: Source | None = None,
    returns: Source | None = None,
    corridors: Source | None = None,
    settings: Settings = DEFAULTS,
    date: str | datetime.date | None = None,
    at: str | None = None,
    finish: str | Finish | Iterable[str | Finish] = (),
    ignore_columns: Iterable[str] = (),
    out: str | Path | None = None,
    fresh: bool = False,
    progress: Progress | None = None,
) -> WhatIf:
    """Solve the orders at every point of a grid, each order alone.

    Parameters
    ----------
    orders, market, profiles, readings, settings, date, at, finish, ignore_columns : as in `plan`.
    grid : values by axis, as in {"urgency": [0, 0.1, 1], "volume": "0.5:2:5"}; see
        `scheduler.scenarios.axes`. The points are the full product, the last axis fastest.
    out : directory in which every finished part is kept at once; a run that was stopped goes on
        from there when called again. fresh : start anew all the same.
    progress : called with rows solved and rows in all.

    Raises:
        InputError: everything wrong with grid or input, at once.
        MisuseError: a grid too large, tables of a list, parts of another run under `out`.
        InfeasibleError, NotConvergedError: the base itself has no schedule.
    """
    asked = read_grid(grid)
    _check(settings, exposures, factor_covariance, returns, corridors)
    inputs = read_inputs(
        orders,
        market,
        profiles=profiles,
        readings=readings,
        ignore_columns=ignore_columns,
        settings=settings,
    )
    asked.check_size(len(inputs.orders.frame))
    _check_apart(inputs)
    parts = None if out is None else Parts(Path(out))
    given = {"date": None if date is None else str(date), "at": at}
    now = _moment(None if fresh else parts, given)
    recipe = Recipe(inputs, settings, session_day(date), at, now, asked_finish(finish, settings))
    study = Study(recipe, asked, solver_of(settings))
    _ = study.base_shares  # whatever is wrong is found before anything is written
    if parts is not None:
        check_not_over(study.base.inputs.values(), parts.directory, _FILES)
        parts.begin(_manifest(study, given), fresh=fresh)
    rows = pd.concat(list(_solved(study, parts, progress)), ignore_index=True)
    rows = rows.sort_values("point", kind="stable", ignore_index=True)
    return _result(study, rows)


def _check(settings: Settings, *tables: Source | None) -> None:
    if not isinstance(settings, Settings):
        raise MisuseError("settings must be Settings; read a file with read_settings")
    check_aim(settings)
    if any(table is not None for table in tables):
        raise MisuseError(
            "what-if solves every order alone: risk tables and corridors, which tie orders into "
            "one list, are for plan; leave out exposures, factor_covariance, returns and corridors"
        )
    if settings.plan.risk_budget is not None or settings.plan.cost_budget is not None:
        raise MisuseError(
            "what-if has no budgets; vary urgency and read off the frontier where a budget is met"
        )


def _check_apart(inputs: Inputs) -> None:
    """Refuse orders that share the imbalance of one symbol: rows of a grid are each alone."""
    again = inputs.orders.frame.duplicated("symbol").to_numpy()
    rule = "has another order of its symbol, whose imbalance it shares"
    remedy = "what-if solves every order alone: combine them into one"
    problems = inputs.orders.problems(again, "symbol", rule, remedy)
    if problems:
        raise InputError(problems)


def _moment(parts: Parts | None, given: Mapping[str, str | None]) -> pd.Timestamp:
    """The present; of a run that goes on, the present of its beginning."""
    known = None if parts is None else parts.manifest()
    if known is not None and all(known.get(name) == value for name, value in given.items()):
        return pd.Timestamp(known["now"])
    return pd.Timestamp.now(tz="UTC")


def _manifest(study: Study, given: Mapping[str, str | None]) -> dict[str, Any]:
    """What the rows depend on."""
    recipe = study.recipe
    return {
        **given,
        "version": version("headrace"),
        "now": recipe.now.isoformat(),
        "inputs": fingerprints(recipe.inputs),
        "settings": recipe.settings.as_dict(),
        "finish": [f"{item.fraction}@{item.time}" for item in recipe.finish],
        "grid": study.grid.axes,
        "parts": len(study.chunks),
    }


def _solved(study: Study, parts: Parts | None, progress: Progress | None) -> Iterator[pd.DataFrame]:
    """The rows of every chunk, those kept from an earlier run unsolved."""
    count = len(study.base.names)
    total, done = count * (len(study.grid) + 1), 0

    def told(rows: int, _all: int) -> None:
        if progress is not None:
            progress(done + rows, total)

    for number, points in enumerate(study.chunks):
        rows = None if parts is None else parts.read(number)
        if rows is None:
            rows = study.rows(points, told)
            if parts is not None:
                parts.write(number, rows)
        yield rows
        done += count * len(points)
        told(0, 0)


def _result(study: Study, rows: pd.DataFrame) -> WhatIf:
    """The result with its knees marked."""
    found = tuple(frontiers(rows, study.grid))
    mark = np.zeros(len(rows), dtype=bool)
    mark[[line.rows[line.knee] for line in found if line.knee is not None]] = True
    rows = rows.assign(knee=mark)
    notes = (ROUNDING, *study.base.notes)
    return WhatIf(rows, _summary(study, rows, found, notes), found, notes, study)


def _summary(
    study: Study, rows: pd.DataFrame, found: tuple[Frontier, ...], notes: tuple[str, ...]
) -> dict[str, Any]:
    base, grid = study.base, study.grid
    by_point = rows.groupby("point", sort=True)
    totals = by_point[["expected_cost", "objective", "regret", "excess_shares"]].sum(min_count=1)
    without = (~rows["status"].isin(SOLVED)).groupby(rows["point"]).sum()
    points = [
        {
            "point": point,
            **grid.at(point),
            **row,
            "without_schedule": int(without[point]),
        }
        for point, row in zip(totals.index.tolist(), totals.to_dict("records"), strict=True)
    ]
    return {
        "schema": 1,
        "version": version("headrace"),
        "date": base.date.isoformat(),
        "at": None if base.at is None else base.at.isoformat(),
        "currency": base.currency,
        "caution": CAUTION,
        "grid": {name: list(values) for name, values in grid.axes.items()},
        "status": rows["status"].value_counts().to_dict(),
        "base": rows[rows["point"] == 0].to_dict("records"),
        "points": points,
        "knees": [
            {
                "order_id": line.order_id,
                **line.values,
                **({} if line.knee is None else _knee(line, grid)),
                "meaning": line.words,
            }
            for line in found
        ],
        "settings": base.settings.as_dict(),
        "inputs": dict(base.inputs),
        "notes": list(notes),
    }


def _knee(line: Frontier, grid: Grid) -> dict[str, float]:
    assert line.knee is not None
    assert grid.aim is not None
    return {
        grid.aim: float(line.aim[line.knee]),
        "expected_cost_bps": float(line.cost[line.knee]),
        "cost_std_bps": float(line.risk[line.knee]),
    }
