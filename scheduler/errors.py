"""Every error headrace raises on purpose, under one root.

Each message says what is wrong, where, and what to do next. `exit_status` is what the
command line ends with: 1 for a problem that can be read but not solved, 2 for misuse or
bad input.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing wrong with one cell of an input table, or with the table as a whole.

    `row` is the line number in the file as an editor shows it (the header is line 1).
    `row=None` and `column=None` speak of the table.
    """

    source: str
    row: int | None
    column: str | None
    value: str | None
    rule: str
    remedy: str

    def __str__(self) -> str:
        place = [self.source]
        if self.row is not None:
            place.append(f"row {self.row}")
        if self.column is not None:
            place.append(f"column {self.column}")
        got = "" if self.value is None else f", got {self.value!r}"
        return f"{', '.join(place)}: {self.rule}{got}; {self.remedy}"


class HeadraceError(Exception):
    """Root of all errors raised by headrace."""

    exit_status = 1


class InputError(HeadraceError):
    """Input tables or settings that cannot be used; carries every problem found."""

    exit_status = 2

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class MisuseError(HeadraceError):
    """A call or command line that contradicts itself."""

    exit_status = 2


class MissingExtraError(HeadraceError):
    """An optional library that this request needs is not installed."""

    exit_status = 2


class OutputError(HeadraceError):
    """A result that could not be written; files that were there before are unchanged."""

    exit_status = 2


class JournalError(HeadraceError):
    """A journal that cannot be read or written; what it holds is unchanged."""

    exit_status = 2


class InfeasibleError(HeadraceError):
    """Readable, but no schedule keeps every limit: says which limit binds, and by how much."""


class NotConvergedError(HeadraceError):
    """The solver stopped before its tolerance; no schedule is given out."""


class LostWorkersError(HeadraceError):
    """Workers died, or were lost, before everything was solved; finished parts are kept."""
