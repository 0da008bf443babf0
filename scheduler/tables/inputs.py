"""All input tables of a run, read and checked together: one error names every problem."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from functools import partial
from typing import TypeVar

from scheduler.errors import InputError, MisuseError, Problem
from scheduler.settings import DEFAULTS, Settings
from scheduler.tables import (
    bars,
    closes,
    constraints,
    corridors,
    exposures,
    factor_covariance,
    fills,
    holdings,
    market,
    orders,
    profiles,
    readings,
    returns,
    trades,
)
from scheduler.tables.cross import check_together
from scheduler.tables.cross_list import check_list
from scheduler.tables.draft import Checked
from scheduler.tables.source import Source

TABLES = {
    module.TABLE.name: module
    for module in (
        orders,
        market,
        profiles,
        readings,
        exposures,
        factor_covariance,
        returns,
        corridors,
        constraints,
        holdings,
        bars,
        trades,
        fills,
        closes,
    )
}
"""The module of each table, by the table's name."""


Result = TypeVar("Result")


@dataclass(frozen=True)
class Inputs:
    """The tables that a plan is made from, and what their user should know."""

    orders: Checked
    market: Checked
    notes: tuple[str, ...]
    profiles: Checked | None = None
    readings: Checked | None = None
    exposures: Checked | None = None
    factor_covariance: Checked | None = None
    returns: Checked | None = None
    corridors: Checked | None = None
    constraints: Checked | None = None


def read_inputs(
    orders: Source,
    market: Source,
    *,
    profiles: Source | None = None,
    readings: Source | None = None,
    exposures: Source | None = None,
    factor_covariance: Source | None = None,
    returns: Source | None = None,
    corridors: Source | None = None,
    constraints: Source | None = None,
    ignore_columns: Iterable[str] = (),
    settings: Settings = DEFAULTS,
) -> Inputs:
    """Read and check the tables of a plan, each by itself and all together.

    Raises:
        InputError: with every problem found in any of them.
        MisuseError: if more than one table is to come from standard input, or if the risk tables
            are not either exposures with factor_covariance, or returns.
    """
    if (exposures is None) != (factor_covariance is None):
        raise MisuseError("exposures and factor_covariance belong together; give both")
    if returns is not None and exposures is not None:
        raise MisuseError("give either exposures with factor_covariance, or returns, not both")
    given = {
        "orders": orders,
        "market": market,
        "profiles": profiles,
        "readings": readings,
        "exposures": exposures,
        "factor_covariance": factor_covariance,
        "returns": returns,
        "corridors": corridors,
        "constraints": constraints,
    }
    tables, notes = read_tables(given, ignore_columns=ignore_columns, settings=settings)
    return Inputs(**tables, notes=notes)


def read_tables(
    sources: Mapping[str, Source | None],
    *,
    ignore_columns: Iterable[str] = (),
    settings: Settings = DEFAULTS,
) -> tuple[dict[str, Checked], tuple[str, ...]]:
    """Read and check tables by name (those that are not None); also all their notes.

    Raises:
        InputError: with every problem found in any of them.
        MisuseError: if more than one table is to come from standard input.
    """
    tables, problems = read_each(sources, ignore_columns=ignore_columns, settings=settings)
    given = {name for name, source in sources.items() if source is not None}
    notes = [note for table in tables.values() for note in table.notes]
    if "orders" in tables and "market" in tables:
        more, warned = check_together(
            tables["orders"],
            tables["market"],
            tables.get("profiles"),
            tables.get("readings"),
            settings,
        )
        problems += more
        notes += warned
    problems += check_list(tables, frozenset(given - set(tables)))
    if problems:
        raise InputError(problems)
    return tables, tuple(notes)


def read_each(
    sources: Mapping[str, Source | None],
    *,
    ignore_columns: Iterable[str] = (),
    settings: Settings = DEFAULTS,
) -> tuple[dict[str, Checked], list[Problem]]:
    """Read and check tables by name, each by itself; those without problems, and the problems.

    Raises:
        MisuseError: if more than one table is to come from standard input.
    """
    given = {name: source for name, source in sources.items() if source is not None}
    piped = [name for name, source in given.items() if isinstance(source, str) and source == "-"]
    if len(piped) > 1:
        raise MisuseError(f"only one table can come from standard input, not {', '.join(piped)}")
    names = ignore_columns if isinstance(ignore_columns, str) else tuple(ignore_columns)
    problems: list[Problem] = []
    tables: dict[str, Checked] = {}
    for name, source in given.items():
        ensure = partial(TABLES[name].ensure, source, ignore_columns=names, settings=settings)
        table = gather(problems, ensure)
        if table is not None:
            tables[name] = table
    return tables, problems


def gather(problems: list[Problem], read: Callable[[], Result]) -> Result | None:
    """What `read` returns; the problems of an InputError are added to the list instead."""
    try:
        return read()
    except InputError as error:
        problems += error.problems
        return None
