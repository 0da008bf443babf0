"""Verifying finds every change, short of every later entry written anew."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from scheduler.errors import JournalError
from scheduler.journal.chain import chained
from scheduler.journal.store import Journal
from scheduler.journal.verify import verify
from tests.journal.writing import add

KEYS = {"headrace_entries": "number", "headrace_contents": "sha256"}


@pytest.fixture
def open_to_change(place: str) -> Iterator[Journal]:
    """Three small entries, whose guards against changes are off."""
    with Journal(place) as journal:
        for text in ("one", "two", "three"):
            add(journal, text)
        assert verify(journal).problems == ()
        if journal.place.is_server:
            journal.database.rows("SET session_replication_role = replica")
        else:
            for table in KEYS:
                journal.database.rows(f"DROP TRIGGER {table}_update")
                journal.database.rows(f"DROP TRIGGER {table}_delete")
        yield journal


def _flips(value: Any) -> Iterator[Any]:
    """The value with one byte changed, for each of its bytes."""
    if isinstance(value, int):
        yield from (value ^ (1 << 8 * byte) for byte in range(8))
        return
    data = value.encode() if isinstance(value, str) else bytes(value)
    for at in range(len(data)):
        changed = data[:at] + bytes([data[at] ^ 1]) + data[at + 1 :]
        yield changed.decode() if isinstance(value, str) else changed


def test_every_flipped_byte_of_every_cell_is_found(open_to_change: Journal) -> None:
    """What the database's own rules refuse (a number or hash twice) cannot be written at all."""
    database = open_to_change.database
    known = len(verify(open_to_change).problems)
    tried = refused = 0
    for table, key in KEYS.items():
        columns = {
            "headrace_entries": ("number", "hash", "previous", "made", "kind", "brief", "manifest"),
            "headrace_contents": ("sha256", "size", "packed_sha256", "packed"),
        }[table]
        for row in database.rows(f"SELECT {key}, {', '.join(columns)} FROM {table}"):
            for column, value in zip(columns, row[1:], strict=True):
                for changed in _flips(value):
                    tried += 1
                    database.rows("BEGIN")
                    try:
                        database.rows(
                            f"UPDATE {table} SET {column} = ? WHERE {key} = ?", (changed, row[0])
                        )
                        found = verify(open_to_change).problems
                        assert len(found) > known, (table, column, value, changed)
                    except JournalError:
                        refused += 1
                    database.rows("ROLLBACK")
    assert tried > 2000
    assert refused < 5
    assert len(verify(open_to_change).problems) == known


@pytest.mark.parametrize("step", [61, pytest.param(1, marks=pytest.mark.slow)])
def test_every_flipped_byte_of_the_file_is_found_or_means_nothing(
    tmp_path: Path, step: int
) -> None:
    """Either verifying finds it, or every entry and content reads as it was written."""
    path = tmp_path / "journal.db"
    with Journal(str(path)) as journal:
        for text in ("one", "two", "three"):
            add(journal, text)
        wanted = _all_of(journal)
    whole = path.read_bytes()
    unfound = 0
    for at in range(0, len(whole), step):
        changed = tmp_path / "changed.db"
        changed.write_bytes(whole[:at] + bytes([whole[at] ^ (1 << at % 8)]) + whole[at + 1 :])
        try:
            with Journal(str(changed), write=False) as journal:
                if verify(journal).problems:
                    continue
                unfound += 1
                assert _all_of(journal) == wanted, at
        except JournalError:
            continue
    assert 0 < unfound < len(whole) / step  # some bytes are empty space; not all are


def test_every_key_of_an_index_that_is_flipped_is_found(tmp_path: Path) -> None:
    """A hash stands in its row and in an index; in the index it leads astray who follows it."""
    path = tmp_path / "journal.db"
    with Journal(str(path)) as journal:
        for text in ("one", "two", "three"):
            add(journal, text)
        keys = [row[0] for row in _all_of(journal)[1]]
    whole = path.read_bytes()
    for key in keys:
        places = [match.start() for match in re.finditer(key.encode(), whole)]
        assert len(places) >= 2
        for at in places:
            for mask in (1, 0x20, 0x40):
                changed = tmp_path / "changed.db"
                changed.write_bytes(whole[:at] + bytes([whole[at] ^ mask]) + whole[at + 1 :])
                with Journal(str(changed), write=False) as journal:
                    assert verify(journal).problems


def _all_of(journal: Journal) -> tuple[list[Any], list[Any]]:
    rows = journal.database.rows("SELECT sha256, packed FROM headrace_contents ORDER BY sha256")
    return journal.entries(), rows


@pytest.mark.parametrize(
    ("statement", "words"),
    [
        ("DELETE FROM headrace_entries WHERE number = 2", "entry 2: is missing"),
        ("DELETE FROM headrace_entries WHERE number = 1", "entry 1: is missing"),
        ("UPDATE headrace_entries SET kind = 'review' WHERE number = 3", "entry 3: was changed"),
        ("DELETE FROM headrace_contents WHERE size < 10", "(first in entry "),
    ],
)
def test_what_was_done_is_said(open_to_change: Journal, statement: str, words: str) -> None:
    open_to_change.database.rows(statement)
    assert any(words in problem for problem in verify(open_to_change).problems)


def test_a_content_slipped_in_is_found(place: str) -> None:
    """Appending rows is allowed; a row that no entry names is not right all the same."""
    with Journal(place) as journal:
        add(journal, "one")
        journal.database.rows(
            "INSERT INTO headrace_contents (sha256, size, packed_sha256, packed) "
            "SELECT 'f', size, packed_sha256, packed FROM headrace_contents LIMIT 1"
        )
        assert any("content f: was changed" in text for text in verify(journal).problems)


def test_guards_taken_off_are_found(tmp_path: Path) -> None:
    with Journal(str(tmp_path / "journal.db")) as journal:
        add(journal, "one")
        journal.database.rows("DROP TRIGGER headrace_entries_delete")
        assert verify(journal).problems == ("the triggers that refuse changes are gone",)


def test_entries_written_anew_are_found_by_a_head_noted_before(open_to_change: Journal) -> None:
    """A forger who chains the second and third anew is seen by nobody without a noted head."""
    database = open_to_change.database
    known = verify(open_to_change).problems
    first, second, third = open_to_change.entries()
    parts = {"made": second.made, "manifest": second.manifest}
    forged = chained(2, first.hash, kind="plan", brief='{"orders":9}', **parts)
    parts = {"made": third.made, "manifest": third.manifest}
    after = chained(3, forged.hash, kind="plan", brief=third.brief, **parts)
    for entry in (after, forged):
        database.rows(
            "UPDATE headrace_entries SET hash = ?, previous = ?, brief = ? WHERE number = ?",
            (entry.hash, entry.previous, entry.brief, entry.number),
        )
    assert verify(open_to_change).problems == known
    assert verify(open_to_change, head=first.hash).problems == known
    for head in (second.hash, third.hash[:10]):
        assert (
            f"head {head}: no entry has this hash" in verify(open_to_change, head=head).problems[-1]
        )


def test_entries_cut_off_the_end_are_found_by_a_head(open_to_change: Journal) -> None:
    third = open_to_change.entry(3)
    open_to_change.database.rows("DELETE FROM headrace_entries WHERE number = 3")
    open_to_change.database.rows(
        "DELETE FROM headrace_contents WHERE sha256 = ?", (third.manifest,)
    )
    assert not verify(open_to_change, head=third.hash).sound


@pytest.mark.parametrize("head", ["", "abc", "12345", "g" * 64])
def test_a_head_that_says_nothing_is_refused(tmp_path: Path, head: str) -> None:
    from scheduler.errors import MisuseError

    with Journal(str(tmp_path / "journal.db")) as journal:
        add(journal, "one")
        with pytest.raises(MisuseError, match="is no hash"):
            verify(journal, head=head)
