"""Verifying a journal: every hash computed anew, every link followed, every content read."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from scheduler.errors import JournalError, MisuseError
from scheduler.journal.chain import GENESIS, Entry, digest, holds
from scheduler.journal.schema import TABLES
from scheduler.journal.store import Journal, unpacked


@dataclass(frozen=True)
class Verdict:
    """What verifying found. head : the hash of the last entry; worth noting elsewhere."""

    entries: int
    head: str
    problems: tuple[str, ...]

    @property
    def sound(self) -> bool:
        return not self.problems


def verify(journal: Journal, *, head: str | None = None) -> Verdict:
    """Check the chain and all contents.

    Any change is found but one: that somebody wrote every entry from the changed one on anew. That
    needs a head noted elsewhere.

    head : the hash of some entry, as noted when it was the last one; it must still be there.

    Raises:
        MisuseError: head is no hash.
    """
    if head is not None and not re.fullmatch("[0-9a-f]{8,64}", head.lower()):
        raise MisuseError(f"head {head!r} is no hash; give 8 to 64 of its hexadecimal digits")
    problems: list[str] = []
    named: dict[str, int] = {}
    count, last, heads = 0, GENESIS, set()
    with _read_on(problems):
        problems += _of_the_file(journal)
    with _read_on(problems):
        for entry in journal.stream():
            count += 1
            problems += _of_entry(entry, count, last)
            last = str(entry.hash)
            heads.add(last)
            for name in _names(journal, entry, problems):
                named.setdefault(name, count)
    with _read_on(problems):
        problems += _of_contents(journal, named)
    if head is not None and not any(known.startswith(head.lower()) for known in heads):
        problems.append(
            f"head {head}: no entry has this hash; entries were removed or written anew since it "
            "was noted"
        )
    return Verdict(count, last, tuple(problems))


@contextmanager
def _read_on(problems: list[str]) -> Iterator[None]:
    """What cannot be read is a problem like others; the rest is looked at all the same."""
    try:
        yield
    except JournalError as error:
        problems.append(f"cannot be read to its end: {error}")


def _of_entry(entry: Entry, count: int, last: str) -> list[str]:
    problems = []
    if entry.number != count:
        problems.append(f"entry {count}: is missing; entry {entry.number} stands in its place")
    if entry.previous != last:
        problems.append(f"entry {entry.number}: is not chained to the one before")
    if not holds(entry):
        problems.append(f"entry {entry.number}: was changed; its hash is that of something else")
    return problems


def _names(journal: Journal, entry: Entry, problems: list[str]) -> list[str]:
    """The contents that an entry names, its manifest among them."""
    try:
        manifest: dict[str, Any] = json.loads(journal.content(entry.manifest))
        parts = [*manifest["inputs"].values(), *manifest["outputs"].values()]
        return [entry.manifest, *(part["sha256"] for part in parts)]
    except (JournalError, ValueError, KeyError, TypeError, AttributeError):
        problems.append(f"entry {entry.number}: its manifest is missing or was changed")
        return [str(entry.manifest)]


def _of_contents(journal: Journal, named: dict[str, int]) -> list[str]:
    problems, seen = [], set()
    statement = (
        "SELECT sha256, size, packed_sha256, packed FROM headrace_contents "
        "WHERE sha256 > ? ORDER BY sha256 LIMIT ?"
    )
    for name, size, packed_sha256, packed in journal.database.stream(statement, "", 16):
        seen.add(name)
        data = unpacked(packed)
        if (
            data is None
            or digest(data) != name
            or len(data) != size
            or digest(packed) != packed_sha256
        ):
            problems.append(f"content {str(name)[:12]}{_of(named, name)}: was changed")
        elif name not in named:
            problems.append(f"content {str(name)[:12]}: no entry names it")
    problems += [
        f"content {name[:12]}{_of(named, name)}: is missing" for name in named.keys() - seen
    ]
    return problems


def _of(named: dict[str, int], name: str) -> str:
    return f" (first in entry {named[name]})" if name in named else ""


def _of_the_file(journal: Journal) -> list[str]:
    """What SQLite itself finds wrong with its file, and whether the guards are still there."""
    if journal.place.is_server:
        query = (
            "SELECT count(*) FROM pg_trigger WHERE tgenabled <> 'D' AND NOT tgisinternal AND "
            "tgrelid IN (to_regclass(?), to_regclass(?))"
        )
        names, wanted = list(TABLES), len(TABLES)
        found = []
    else:
        query = "SELECT count(*) FROM sqlite_master WHERE type = 'trigger' AND name LIKE ?"
        names, wanted = ["headrace_%"], 2 * len(TABLES)
        found = [
            f"the file: {text}"
            for (text,) in journal.database.rows("PRAGMA integrity_check(10)")
            if text != "ok"
        ]
    if journal.database.rows(query, names)[0][0] < wanted:
        found.append("the triggers that refuse changes are gone")
    return found
