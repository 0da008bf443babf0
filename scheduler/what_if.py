"""The verb `what-if`: the same orders over a grid of choices and worlds."""

from __future__ import annotations

import datetime
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from importlib import import_module
from importlib.metadata import version
from pathlib import Path
from types import MappingProxyType
from typing import Any

import pandas as pd

from scheduler.errors import InputError, MisuseError
from scheduler.intake import Book, Finish
from scheduler.plan import asked_finish, check_aim, session_day, solver_of
from scheduler.scenarios import (
    FRONTIER_COLUMNS,
    HELD,
    LISTED,
    Crew,
    Frontier,
    Grid,
    Parts,
    Recipe,
    Study,
    Table,
    Value,
    Values,
    at_work,
    digest,
    fingerprints,
    frontiers,
    near_base,
    nearest,
    read_grid,
    solve_all,
)
from scheduler.settings import DEFAULTS, Settings
from scheduler.solve.schedule import Progress
from scheduler.tables.inputs import Inputs, read_inputs
from scheduler.tables.source import Source
from scheduler.tables.write import Blocks, check_not_over, write_files

_FILES = ("scenarios.csv", "scenarios.parquet", "summary.json", "report.html")
_ON_DISK = (
    "The table is too large for memory and stays on disk: of frontiers those near the base are "
    f"listed here, and totals by point up to {LISTED:,} points; the table has all."
)
ROUNDING = "Figures are before whole lots and min_slice, which would add noise to what is compared."


@dataclass(frozen=True)
class WhatIf:
    """A grid of scenarios.

    table : one row a point and order; point 0 is the base. summary : ready for JSON.
    frontiers : points that share everything but the aim, order by order; of a table too large for
        memory those near the base. near_base : of every order the value of each axis that is
        nearest to the base's, by order_id. notes : what the user should know. study : what solves
        a point anew.
    """

    table: Table = field(repr=False)
    summary: dict[str, Any]
    frontiers: tuple[Frontier, ...] = field(repr=False)
    near_base: Mapping[str, dict[str, Value]] = field(repr=False)
    notes: tuple[str, ...]
    study: Study = field(repr=False)

    @property
    def scenarios(self) -> pd.DataFrame:
        """The table as one frame; read from disk each time, if it is kept there."""
        return self.table.whole()

    @property
    def grid(self) -> Grid:
        return self.study.grid

    @property
    def book(self) -> Book:
        """The orders of the base."""
        return self.study.base

    def figure(self, name: str, order_id: str | None = None) -> Any:
        """A chart, `frontier` or `regret`, of one order (the first, if not named), by plotly.

        Raises:
            MisuseError: no such chart or order. MissingExtraError: plotly is not installed.
        """
        return import_module("scheduler.report.what_if_figures").figure(self, name, order_id)

    def write(self, directory: str | Path, *, report: bool = False, parquet: bool = False) -> None:
        """Write scenarios, summary and, if asked for, the report page: all of them or nothing."""
        table = f"scenarios.{'parquet' if parquet else 'csv'}"
        rows = Blocks(self.table.by_points) if self.table.held is None else self.table.held
        files: dict[str, Any] = {table: rows, "summary.json": self.summary}
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
    workers: int | None = None,
    cluster: str | None = None,
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
    workers : solve by so many processes of this machine (a script that asks for them needs
        `if __name__ == "__main__":`, as they load it). cluster : or by the workers of a Dask
        cluster, by the address of its scheduler. The numbers are the same, to 1e-10.
    progress : called with rows solved and rows in all.

    Raises:
        InputError: everything wrong with grid or input, at once.
        MisuseError: a grid too large, or too large for memory without `out`; tables of a list;
            parts of another run under `out`; a cluster that cannot be used.
        InfeasibleError, NotConvergedError: the base itself has no schedule.
        MissingExtraError: workers without dask.distributed. LostWorkersError: see `fan_out`.
    """
    asked = read_grid(grid)
    crew = None if workers is None and cluster is None else Crew(workers, cluster)
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
    if out is None:
        _check_held(asked, len(inputs.orders.frame))
    _check_apart(inputs)
    parts = None if out is None else Parts(Path(out))
    given = {"date": None if date is None else str(date), "at": at}
    now = _moment(None if fresh else parts, given)
    recipe = Recipe(inputs, settings, session_day(date), at, now, asked_finish(finish, settings))
    study = Study(recipe, asked, solver_of(settings))
    _ = study.base_shares  # whatever is wrong is found before anything is written
    if parts is not None:
        check_not_over(study.base.inputs.values(), parts.directory, _FILES)
    with at_work(crew) as client:
        if parts is not None:
            parts.begin(_manifest(study, given), fresh=fresh)
        table = solve_all(study, parts, client, progress)
    return _result(study, table)


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


def _check_held(grid: Grid, orders: int) -> None:
    """Refuse a table that is too large for memory where there is no directory to keep it in."""
    rows = (len(grid) + 1) * orders
    if rows > HELD:
        raise MisuseError(
            f"the table would have {rows:,} rows; more than {HELD:,} are kept on disk, not in "
            "memory: give a directory with --out (out=...)"
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


def _result(study: Study, table: Table) -> WhatIf:
    """The result with its knees marked."""
    near = dict(zip(study.base.names, near_base(study), strict=True))
    found, knees = [], []
    for rows in table.by_orders(["point", *study.grid.axes, "order_id", *FRONTIER_COLUMNS]):
        lines = list(frontiers(rows, study.grid))
        knees += [int(line.rows[line.knee]) for line in lines if line.knee is not None]
        found += lines if table.held is not None else nearest(lines, near)
    table = table.with_knees(knees)
    notes = (ROUNDING, *study.base.notes)
    if table.held is None:
        notes = (*notes, _ON_DISK)
    return WhatIf(
        table,
        digest(study, table, found, notes),
        tuple(found),
        MappingProxyType(near),
        notes,
        study,
    )
