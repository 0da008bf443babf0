"""The store: entries appended one after another, contents kept once by their own hash."""

from __future__ import annotations

import datetime
import re
import zlib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import Any

from scheduler.errors import JournalError, MisuseError
from scheduler.journal.chain import GENESIS, Entry, canonical, chained, digest
from scheduler.journal.databases import Database, connect
from scheduler.journal.place import Place

_COLUMNS = "number, hash, previous, made, kind, brief, manifest"
_FEWEST_DIGITS = 4  # of a hash, by which an entry may be named
_LEVEL = 1  # of compression: a third larger than the best, ten times as fast
_LOWEST = -(2**63)  # below every number, those that somebody slipped in included
_AT_ONCE = 900  # values in one statement; older SQLite takes 999


@dataclass(frozen=True)
class Size:
    """What a journal takes. kept : bytes of contents as they are stored, each once, compressed.
    plain : the same before compression. oldest, newest : when made; None of an empty one."""

    entries: int
    contents: int
    kept: int
    plain: int
    oldest: str | None
    newest: str | None


class Journal:
    """An open journal; use it in a `with` statement.

    Raises:
        JournalError: it cannot be opened, read or written.
        MissingExtraError: PostgreSQL is asked for and its driver is not installed.
    """

    def __init__(self, place: Place | str, *, write: bool = True) -> None:
        self.place = Place(place) if isinstance(place, str) else place
        self.database: Database = connect(self.place, write=write)

    def __enter__(self) -> Journal:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.database.close()

    def append(
        self,
        kind: str,
        *,
        brief: Mapping[str, Any],
        manifest: Mapping[str, Any],
        contents: Iterable[bytes] = (),
    ) -> Entry:
        """Add an entry and its contents: all of it or nothing. It is on the disk on return.

        brief, manifest : plain data, see `Entry`. contents : what the manifest names by hash.
        """
        page = canonical(manifest)
        packed = self._packed({digest(data): data for data in (*contents, page)})
        text = canonical(brief).decode()
        with self.database.writing():
            for row in packed:
                self.database.rows(
                    "INSERT INTO headrace_contents (sha256, size, packed_sha256, packed) "
                    "VALUES (?, ?, ?, ?) ON CONFLICT DO NOTHING",
                    row,
                )
            last = self.last()
            number, previous = (1, GENESIS) if last is None else (last.number + 1, last.hash)
            made = datetime.datetime.now(datetime.UTC).isoformat(timespec="milliseconds")
            entry = chained(
                number, previous, made=made, kind=kind, brief=text, manifest=digest(page)
            )
            self.database.rows(
                f"INSERT INTO headrace_entries ({_COLUMNS}) VALUES (?, ?, ?, ?, ?, ?, ?)",
                entry,
            )
        return entry

    def last(self) -> Entry | None:
        """The newest entry."""
        rows = self.database.rows(
            f"SELECT {_COLUMNS} FROM headrace_entries ORDER BY number DESC LIMIT 1"
        )
        return Entry(*rows[0]) if rows else None

    def entries(self, newest: int | None = None, kind: str | None = None) -> list[Entry]:
        """Entries in the order they were made: all, or the newest few, of every kind or of one."""
        where, values = ("", []) if kind is None else (" WHERE kind = ?", [kind])
        limit = "" if newest is None else f" LIMIT {int(newest)}"
        rows = self.database.rows(
            f"SELECT {_COLUMNS} FROM headrace_entries{where} ORDER BY number DESC{limit}", values
        )
        return [Entry(*row) for row in reversed(rows)]

    def stream(self) -> Iterator[Entry]:
        """Every entry from the first on, without holding all of them."""
        statement = (
            f"SELECT {_COLUMNS} FROM headrace_entries WHERE number > ? ORDER BY number LIMIT ?"
        )
        return (Entry(*row) for row in self.database.stream(statement, _LOWEST, 1000))

    def entry(self, name: str | int) -> Entry:
        """An entry by its number, `last`, or the beginning of its hash (four digits or more).

        Raises:
            MisuseError: there is none, or several.
        """
        text = str(name).lower()
        if text == "last":
            found = self.last()
            rows: list[tuple[Any, ...]] = [] if found is None else [found]
        else:
            rows = self._named(text)
        if len(rows) == 1:
            return Entry(*rows[0])
        if not rows:
            raise MisuseError(
                f"journal {self.place}: no entry {name}; `headrace journal list` shows them"
            )
        raise MisuseError(
            f"journal {self.place}: several entries begin with {name}; give more digits"
        )

    def _named(self, text: str) -> list[tuple[Any, ...]]:
        query = f"SELECT {_COLUMNS} FROM headrace_entries WHERE "
        rows: list[tuple[Any, ...]] = []
        if re.fullmatch("[0-9]{1,18}", text):
            rows = self.database.rows(query + "number = ?", (int(text),))
        if not rows and re.fullmatch(f"[0-9a-f]{{{_FEWEST_DIGITS},64}}", text):
            rows = self.database.rows(query + "hash >= ? AND hash <= ?", (text, text + "g"))
        return rows

    def content(self, sha256: str) -> bytes:
        """Bytes by their hash, checked against it.

        Raises:
            JournalError: they are not there, or not what they were.
        """
        rows = self.database.rows(
            "SELECT packed FROM headrace_contents WHERE sha256 = ?", (sha256,)
        )
        data = unpacked(rows[0][0]) if rows else None
        if data is None or digest(data) != sha256:
            what = "was changed" if rows else "is missing"
            raise JournalError(
                f"journal {self.place}: content {sha256[:12]} {what}; `headrace journal verify` "
                "finds all that was"
            )
        return data

    def size(self) -> Size:
        """How much there is, and since when."""
        number, kept, plain = self.database.rows(
            "SELECT count(*), coalesce(sum(length(packed)), 0), coalesce(sum(size), 0) "
            "FROM headrace_contents"
        )[0]
        count, oldest, newest = self.database.rows(
            "SELECT count(*), min(made), max(made) FROM headrace_entries"
        )[0]
        return Size(int(count), int(number), int(kept), int(plain), oldest, newest)

    def _packed(self, contents: Mapping[str, bytes]) -> list[tuple[str, int, str, bytes]]:
        """Rows of the contents that are not there yet."""
        names = list(contents)
        known: set[str] = set()
        for start in range(0, len(names), _AT_ONCE):
            part = names[start : start + _AT_ONCE]
            marks = ", ".join("?" * len(part))
            rows = self.database.rows(
                f"SELECT sha256 FROM headrace_contents WHERE sha256 IN ({marks})", part
            )
            known |= {name for (name,) in rows}
        made = []
        for name in sorted(contents.keys() - known):
            packed = zlib.compress(contents[name], _LEVEL)
            made.append((name, len(contents[name]), digest(packed), packed))
        return made


def unpacked(packed: Any) -> bytes | None:
    """The bytes that were compressed; None if these are no such thing."""
    unpacker = zlib.decompressobj()
    try:
        data = unpacker.decompress(packed)
    except (zlib.error, TypeError):
        return None
    return data if unpacker.eof and not unpacker.unused_data else None
