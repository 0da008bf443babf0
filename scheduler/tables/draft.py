"""A table on its way in: cells converted column by column, problems gathered until the end."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from difflib import get_close_matches
from typing import Any, Protocol

import numpy as np
import pandas as pd

from scheduler.errors import InputError, Problem
from scheduler.settings import DEFAULTS, Settings
from scheduler.tables.cells import CellError, identifier
from scheduler.tables.columns import Column, Mask
from scheduler.tables.source import RawTable, Source, read_raw

SHOWN = 80
"""Characters of a cell that a message shows."""


@dataclass(frozen=True)
class Table:
    """The columns of one table; in `unique` those that together may occur once.

    `rest` is the rule of every further column, whose name is up to the user: a factor, a
    symbol. Without it no column may be there but those named.
    """

    name: str
    columns: tuple[Column, ...]
    unique: tuple[str, ...] = ()
    rest: Column | None = None

    @property
    def header(self) -> list[str]:
        """The names of the columns that a file of this table may fill."""
        return [column.name for column in self.columns if column.kept]


@dataclass(frozen=True)
class Checked:
    """A table without problems: canonical columns, and what its user should know.

    `source` and `rows` (editor line of each row of `frame`) are for later problems found by
    comparing tables. `raw` is what was read (of a file without its cells); None if made here.
    """

    frame: pd.DataFrame
    notes: tuple[str, ...]
    source: str
    rows: np.ndarray[Any, np.dtype[np.int64]]
    raw: RawTable | None = field(default=None, repr=False, compare=False)

    def problems(self, mask: Mask, column: str, rule: str, remedy: str) -> list[Problem]:
        """A problem for each row of the mask."""
        return [
            _problem(self.source, self.rows, at, column, self.frame[column].iat[at], rule, remedy)
            for at in np.flatnonzero(mask).tolist()
        ]


@dataclass
class Draft:
    """A table being checked; a table's own rules add to it with `flag` and `note`.

    rows : the editor line of each row of `frame`.
    """

    table: Table
    raw: RawTable
    rows: np.ndarray[Any, np.dtype[np.int64]]
    frame: pd.DataFrame
    problems: list[Problem]
    settings: Settings
    notes: list[str] = field(default_factory=list)

    def flag(self, mask: Mask, column: str, rule: str, remedy: str) -> None:
        """Record a problem for each row of the mask, with the text its cell holds."""
        for at in np.flatnonzero(mask).tolist():
            self.flag_row(at, column, rule, remedy)

    def flag_row(self, at: int, column: str, rule: str, remedy: str) -> None:
        """Record a problem of the row at a position."""
        cells = self.raw.cells.get(column)
        text = None if cells is None else cells.iat[at]
        self.problems.append(_problem(self.raw.source, self.rows, at, column, text, rule, remedy))

    def note(self, text: str) -> None:
        """Record something the user should know."""
        self.notes.append(f"{self.raw.source}: {text}")

    def checked(self) -> Checked:
        """The finished table.

        Raises:
            InputError: if any problem was found; they come in the order of the rows.
        """
        if self.problems:
            raise InputError(sorted(self.problems, key=lambda problem: problem.row or 0))
        types = {column.name: column.dtype for column in self.table.columns if column.kept}
        frame = self.frame.astype(types)
        raw = self.raw if self.raw.file is None else replace(self.raw, cells={})
        return Checked(frame, tuple(self.notes), self.raw.source, self.rows, raw)


Check = Callable[[Draft], None]
"""A rule of a table beyond those of its cells."""


class Ensure(Protocol):
    """Read and check a table from a path, `-` or a frame; InputError has all its problems."""

    def __call__(
        self, source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
    ) -> Checked: ...


class Read(Protocol):
    """The same, the canonical frame alone."""

    def __call__(
        self, source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
    ) -> pd.DataFrame: ...


def gates(table: Table, *checks: Check) -> tuple[Ensure, Read]:
    """The two ways into a program for a table: checked, with all that is known of it, and bare.

    checks : the table's own rules, in the order in which they are asked.
    """

    def ensure(
        source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
    ) -> Checked:
        draft = _read_draft(table, source, ignore_columns, settings)
        for check in checks:
            check(draft)
        return draft.checked()

    def read(
        source: Source, *, ignore_columns: Iterable[str] = (), settings: Settings = DEFAULTS
    ) -> pd.DataFrame:
        return ensure(source, ignore_columns=ignore_columns, settings=settings).frame

    shown = table.name.replace("_", " ")
    ensure.__doc__ = (
        f"Read and check a {shown} table from a path, `-` or a frame.\n\n"
        "Raises:\n    InputError: with every problem of the table."
    )
    read.__doc__ = f"The canonical {shown} frame; see `ensure`."
    read.__name__ = read.__qualname__ = f"read_{table.name}"
    return ensure, read


def _read_draft(
    table: Table, source: Source, ignore_columns: Iterable[str], settings: Settings
) -> Draft:
    """Read a table and check every cell by its column's rule.

    Raises:
        InputError: if the source cannot be read as a table at all.
    """
    raw = read_raw(source, table.name)
    names = ignored(ignore_columns)
    named, table = table, _widened(table, list(raw.cells), names)
    empty = pd.DataFrame(index=pd.RangeIndex(len(raw.rows)))
    draft = Draft(table, raw, raw.rows, empty, list(raw.problems), settings)
    _check_header(table, draft, names)
    if named.rest is not None:
        _check_rest(named.rest, table.columns[len(named.columns) :], draft)
    converted = {}
    for column in table.columns:
        cells = raw.cells.get(column.name)
        if cells is None:
            values = column.absent(len(raw.rows))
        else:
            values, flaws = column.convert(cells)
            for flaw in flaws:
                draft.flag(flaw.mask, column.name, flaw.rule, flaw.remedy)
        if column.kept:
            converted[column.name] = values
    draft.frame = pd.DataFrame(converted)
    _check_unique(table, draft)
    return draft


def ignored(names: Iterable[str]) -> frozenset[str]:
    """Names of columns to pass over, from a sequence or from text with commas."""
    parts = names.split(",") if isinstance(names, str) else names
    return frozenset(part.strip() for part in parts)


def some(names: Sequence[Any], most: int = 5) -> str:
    """The first few of a list, and how many more there are."""
    shown = ", ".join(str(name) for name in names[:most])
    return shown if len(names) <= most else f"{shown} and {len(names) - most} more"


def _problem(
    source: str,
    rows: np.ndarray[Any, np.dtype[np.int64]],
    at: int,
    column: str,
    value: Any,
    rule: str,
    remedy: str,
) -> Problem:
    text = None if pd.isna(value) or value == "" else str(value)[:SHOWN]
    return Problem(source, int(rows[at]), column, text, rule, remedy)


def _widened(table: Table, present: list[str], passed: frozenset[str]) -> Table:
    """The table with a column for each further name, unless it is passed over or a slip."""
    if table.rest is None:
        return table
    known = [column.name for column in table.columns]
    absent = [name for name in known if name not in present]
    further = [
        replace(table.rest, name=name)
        for name in present
        if name not in known and name not in passed and near_miss(name, absent) is None
    ]
    return replace(table, columns=(*table.columns, *further))


def _check_rest(rest: Column, further: tuple[Column, ...], draft: Draft) -> None:
    source = draft.raw.source
    if not further and len(draft.raw.rows):
        remedy = f"add a column named after {rest.name}: {rest.doc}"
        rule = f"has no column for {rest.name}"
        draft.problems.append(Problem(source, 1, None, None, rule, remedy))
    for column in further:
        try:
            identifier(column.name)
        except CellError as error:
            shown = column.name if column.name.isprintable() else repr(column.name)
            rule = f"the name of the column {error.rule}"
            draft.problems.append(Problem(source, 1, shown, None, rule, error.remedy))


def _check_header(table: Table, draft: Draft, names: frozenset[str]) -> None:
    source, present = draft.raw.source, draft.raw.cells
    known = [column.name for column in table.columns]
    absent = [name for name in known if name not in present]
    passed = []
    for name in (name for name in present if name not in known):
        near = near_miss(name, absent)
        if name in names or ("*" in names and near is None):
            passed.append(name)
            continue
        remedy = (
            f"did you mean {near!r}? Otherwise" if near else f"known: {', '.join(table.header)};"
        )
        remedy += " remove it, or name it among the columns to ignore"
        shown = name if name.isprintable() else repr(name)
        draft.problems.append(Problem(source, 1, shown, None, "unknown column", remedy))
    if passed:
        draft.note(f"ignored columns: {', '.join(passed)}")
    for column in table.columns:
        if column.required and column.name not in present:
            remedy = f"add the column: {column.doc}"
            problem = Problem(source, 1, column.name, None, "required column is missing", remedy)
            draft.problems.append(problem)


def near_miss(name: str, known: list[str]) -> str | None:
    """The known name that `name` is most likely a slip of, if there is one."""
    plain = {_plain(candidate): candidate for candidate in known}
    near = get_close_matches(_plain(name), plain, n=1, cutoff=0.8)
    return plain[near[0]] if near else None


def _plain(name: str) -> str:
    return "".join(letter for letter in name.lower() if letter.isalnum())


def _check_unique(table: Table, draft: Draft) -> None:
    """Flag each row that repeats an earlier one; the message says which row was the first."""
    if not table.unique:
        return
    key = draft.frame[list(table.unique)]
    repeated = key.duplicated().to_numpy() & key[table.unique[0]].notna().to_numpy()
    if not repeated.any():
        return
    group = key.groupby(list(table.unique), dropna=False, sort=False).ngroup().to_numpy()
    first = dict(zip(group[::-1], draft.raw.rows[::-1], strict=True))
    called = " and ".join(table.unique)
    for at in np.flatnonzero(repeated).tolist():
        rule = f"repeats the {called} of row {first[group[at]]}"
        draft.flag_row(at, table.unique[0], rule, "keep one row, or tell them apart")
