"""All input tables of a run, read and checked together: one error names every problem."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from functools import partial
from typing import TypeVar

from scheduler.errors import InputError, MisuseError, Problem
from scheduler.settings import DEFAULTS, Settings
from scheduler.tables import bars, market, orders, profiles, readings
from scheduler.tables.cross import check_together
from scheduler.tables.draft import Checked
from scheduler.tables.source import Source

TABLES = {module.TABLE.name: module for module in (orders, market, profiles, readings, bars)}
"""The module of each table, by the table's name."""


Result = TypeVar("Result")


@dataclass(frozen=True)
class Inputs:
    """The tables that a plan is made from, and what their user should know."""

    orders: Checked
    market: Checked
    profiles: Checked | None
    readings: Checked | None
    notes: tuple[str, ...]


def read_inputs(
    orders: Source,
    market: Source,
    *,
    profiles: Source | None = None,
    readings: Source | None = None,
    ignore_columns: Iterable[str] = (),
    settings: Settings = DEFAULTS,
) -> Inputs:
    """Read and check the tables of a plan, each by itself and all together.

    Raises:
        InputError: with every problem found in any of them.
        MisuseError: if more than one table is to come from standard input.
    """
    given = {"orders": orders, "market": market, "profiles": profiles, "readings": readings}
    tables, notes = read_tables(given, ignore_columns=ignore_columns, settings=settings)
    return Inputs(
        tables["orders"],
        tables["market"],
        tables.get("profiles"),
        tables.get("readings"),
        notes,
    )


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
    if problems:
        raise InputError(problems)
    return tables, tuple(notes)


def gather(problems: list[Problem], read: Callable[[], Result]) -> Result | None:
    """What `read` returns; the problems of an InputError are added to the list instead."""
    try:
        return read()
    except InputError as error:
        problems += error.problems
        return None
