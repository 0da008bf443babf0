"""Planning again from an entry, and how the new plan differs from the one kept."""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import pandas as pd

from scheduler.errors import MisuseError
from scheduler.journal.chain import Entry
from scheduler.journal.entries import versions
from scheduler.journal.reading import as_cells, inputs_of, manifest_of, outputs_of
from scheduler.journal.store import Journal
from scheduler.plan import Plan, plan
from scheduler.settings import settings_from_dict

DIGITS = 10
_EXACT = ("shares", "cumulative", "remaining")
_TIMED = "seconds"  # what the solver took, never twice the same


@dataclass(frozen=True)
class Reproduction:
    """A plan made again. differences : where it is not the one kept: shares must be identical,
    other figures to ten digits. elsewhere : versions and machine that are not those of then."""

    entry: Entry
    plan: Plan
    differences: tuple[str, ...]
    elsewhere: tuple[str, ...]

    @property
    def same(self) -> bool:
        return not self.differences


def reproduce(journal: Journal, name: str | int) -> Reproduction:
    """Plan again from what an entry holds: tables byte for byte, settings, date and time.

    Raises:
        MisuseError: the entry is no plan, or one that was not made from tables.
        JournalError: something of the entry is missing or was changed.
    """
    entry = journal.entry(name)
    manifest = manifest_of(journal, entry)
    if entry.kind != "plan" or manifest["asked"] is None:
        raise MisuseError(f"entry {entry.number}: only plans made from tables can be made again")
    asked = dict(manifest["asked"])
    tables: dict[str, Any] = {"orders": None, **inputs_of(journal, manifest)}
    again = plan(
        **tables,
        **{**asked, "now": pd.Timestamp(asked["now"])},
        settings=settings_from_dict(manifest["settings"]),
    )
    kept = outputs_of(journal, manifest)
    made = again.files(parquet="schedule.parquet" in kept)
    differences = [
        text for file in sorted(kept.keys() | made.keys()) for text in _differ(file, kept, made)
    ]
    now = {"headrace": again.summary["version"], **versions()}
    elsewhere = [
        f"{key}: {then} then, {now.get(key, 'not needed')} now"
        for key, then in manifest["versions"].items()
        if then != now.get(key)
    ]
    return Reproduction(entry, again, tuple(differences), tuple(elsewhere))


def _differ(file: str, kept: dict[str, bytes], made: dict[str, bytes]) -> Iterator[str]:
    if file not in made or file not in kept:
        yield f"{file}: written {'then' if file in kept else 'now'} only"
    elif kept[file] == made[file]:
        return
    elif file.endswith(".json"):
        yield from _in_data(file, json.loads(kept[file]), json.loads(made[file]))
    else:
        yield from _in_table(file, as_cells(file, kept[file]), as_cells(file, made[file]))


def _in_data(place: str, kept: Any, made: Any) -> Iterator[str]:
    if isinstance(kept, dict) and isinstance(made, dict):
        for key in {**kept, **made}:
            if key != _TIMED:
                yield from _in_data(f"{place}, {key}", kept.get(key), made.get(key))
    elif isinstance(kept, list) and isinstance(made, list) and len(kept) == len(made):
        for at, pair in enumerate(zip(kept, made, strict=True), start=1):
            yield from _in_data(f"{place}, {at}", *pair)
    elif _digits(kept) != _digits(made):
        yield f"{place}: {kept} then, {made} now"


def _in_table(file: str, kept: pd.DataFrame, made: pd.DataFrame) -> Iterator[str]:
    if list(kept) != list(made) or len(kept) != len(made):
        yield f"{file}: has other columns or another number of rows"
        return
    for column in kept:
        exact = column in _EXACT
        for row, (then, now) in enumerate(zip(kept[column], made[column], strict=True), start=2):
            if (then if exact else _digits(then)) != (now if exact else _digits(now)):
                yield f"{file}, row {row}, column {column}: {then} then, {now} now"


def _digits(value: Any) -> str:
    """A number at ten digits; anything else as it stands."""
    try:
        return f"{float(value):.{DIGITS - 1}e}"
    except (TypeError, ValueError):
        return str(value)
