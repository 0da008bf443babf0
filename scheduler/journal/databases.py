"""Connections: SQLite in a file, PostgreSQL by URL; one dialect of SQL, errors in plain words.

Statements are written with `?` for values. Both kinds run in autocommit, so that transactions begin
and end where `Database.writing` says. SQLite: write-ahead log, synchronous=FULL, so that what was
acknowledged survives a crash of the machine too; writers wait for each other.
"""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path
from typing import Any
from urllib.parse import quote

from scheduler.errors import JournalError, MissingExtraError
from scheduler.journal.place import Place
from scheduler.journal.schema import POSTGRESQL, SQLITE

WAIT = 30.0
"""Seconds that a writer waits for another one (our choice)."""

_HINDERED = ("SQLITE_CANTOPEN", "SQLITE_READONLY", "SQLITE_FULL", "SQLITE_IOERR_SHM")
_LITTLE = 100_000
"""Bytes of free space below which a disk is taken to be full (a log's index takes 32 kB)."""
_REMEDIES = {
    "SQLITE_FULL": "the disk is full; make room, or keep the journal elsewhere",
    "SQLITE_READONLY": "is read-only; change its permissions, or keep the journal elsewhere",
    "SQLITE_CANTOPEN": "cannot be opened; check the path and the permissions of its directory",
    "SQLITE_PERM": "cannot be opened; check its permissions",
    "SQLITE_BUSY": f"another process has kept it for {WAIT:g} s; try again when that has ended",
    "SQLITE_LOCKED": f"another process has kept it for {WAIT:g} s; try again when that has ended",
    "SQLITE_NOTADB": "is no journal; name another file",
    "SQLITE_CORRUPT": "is damaged; `headrace journal verify` says what can be read",
    "SQLITE_IOERR": "cannot be read or written, as if its disk failed; check the disk",
}


@dataclass(frozen=True)
class Database:
    """An open journal database.

    begin : statements that start a transaction no other writer can be in. failures : exceptions of
    the driver.
    """

    connection: Any
    place: Place
    begin: tuple[str, ...]
    failures: tuple[type[Exception], ...]

    def rows(self, statement: str, values: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        """All rows of a query; none of a statement that gives none."""
        with self._told():
            cursor = self._execute(self.connection.cursor(), statement, values)
            found: list[tuple[Any, ...]] = cursor.fetchall() if cursor.description else []
            cursor.close()
            return found

    def stream(self, statement: str, below: Any, at_once: int) -> Iterator[tuple[Any, ...]]:
        """The rows of a query without holding all of them, `at_once` at a time.

        The statement ends in `> ? ORDER BY ... LIMIT ?` on its first column, which begins above
        `below`: each part is a query of its own, so that nobody waits for a slow reader.

        Raises:
            JournalError: the rows do not rise; an index is damaged, which would give them for ever.
        """
        while part := self.rows(statement, (below, at_once)):
            for row in part:
                if type(row[0]) is not type(below) or row[0] <= below:
                    raise JournalError(
                        f"journal {self.place}: is damaged; its rows lost their order"
                    )
                below = row[0]
                yield row

    @contextmanager
    def writing(self) -> Iterator[None]:
        """A transaction with no other writer beside it; all of it is kept or nothing."""
        try:
            for statement in self.begin:
                self.rows(statement)
            yield
            self.rows("COMMIT")
        except BaseException:
            self._roll_back()
            raise

    def close(self) -> None:
        with self._told():
            self.connection.close()

    def _execute(self, cursor: Any, statement: str, values: Sequence[Any]) -> Any:
        if self.place.is_server:
            statement = statement.replace("?", "%s")
        cursor.execute(statement, tuple(values)) if values else cursor.execute(statement)
        return cursor

    def _roll_back(self) -> None:
        try:
            self.connection.execute("ROLLBACK")
        except self.failures:  # the database has done so by itself; the first error is the news
            return

    @contextmanager
    def _told(self) -> Iterator[None]:
        try:
            yield
        except self.failures as error:
            raise _failure(self.place, error) from error


def connect(place: Place, *, write: bool) -> Database:
    """Open a journal's database; for writing it is made if need be.

    Raises:
        JournalError: it cannot be opened, or is not there to be read.
        MissingExtraError: the driver is not installed.
    """
    return _postgresql(place, write=write) if place.is_server else _sqlite(place, write=write)


def check_driver() -> None:
    """Refuse PostgreSQL where its driver is not installed.

    Raises:
        MissingExtraError: with what to install.
    """
    if find_spec("psycopg") is None:
        raise MissingExtraError(
            "a journal in PostgreSQL needs psycopg: pip install 'headrace[postgres]'"
        )


def _sqlite(place: Place, *, write: bool) -> Database:
    try:
        import sqlite3  # noqa: PLC0415 - some builds of Python lack it
    except ImportError:
        raise MissingExtraError(
            "this Python was built without sqlite3, in which the journal is kept; use another "
            "build, PostgreSQL by URL, or --no-journal"
        ) from None
    failures = (sqlite3.Error, UnicodeError)  # the latter of damaged text
    path = Path(place.address).absolute()
    if write:
        _make_file(place, path)
    elif not path.exists():
        raise JournalError(
            f"journal {place}: there is none yet; it begins with the first plan kept"
        )
    try:
        connection = _opened(sqlite3, path, write=write)
        database = Database(connection, place, ("BEGIN IMMEDIATE",), failures)
        _prepare_sqlite(database, write=write)
    except failures as error:
        raise _failure(place, error) from error
    return database


def _make_file(place: Place, path: Path) -> None:
    """An empty file that its owner alone can read, unless there is one."""
    try:
        path.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
        os.close(os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o600))
    except FileExistsError:
        return
    except OSError as error:
        raise JournalError(
            f"journal {place}: cannot be made ({error.strerror}); check the path and its "
            "permissions, or keep the journal elsewhere"
        ) from error


def _opened(sqlite3: Any, path: Path, *, write: bool) -> Any:
    """A connection; where no log can be made, and so nobody writes, the file is read as it is."""
    address = f"file:{quote(str(path))}"
    modes = ("rw",) if write else ("ro", "ro&immutable=1")
    for mode in modes:
        link = f"{address}?mode={mode}"
        connection = sqlite3.connect(link, uri=True, timeout=WAIT, isolation_level=None)
        try:
            connection.execute("SELECT count(*) FROM sqlite_master")
        except (sqlite3.Error, UnicodeError) as error:
            connection.close()
            if mode == modes[-1] or not _name_of(error).startswith(_HINDERED):
                raise
        else:
            break
    return connection


def _name_of(error: Exception) -> str:
    """SQLite's own name of an error; none of one that the library raised by itself."""
    name: str = getattr(error, "sqlite_errorname", "")
    return name


def _prepare_sqlite(database: Database, *, write: bool) -> None:
    connection = database.connection
    present = {name for (name,) in connection.execute("SELECT name FROM sqlite_master")}
    try:
        if present and "headrace_entries" not in present:
            raise JournalError(f"journal {database.place}: is another database; name another file")
        if not present and not write:
            raise JournalError(f"journal {database.place}: holds nothing yet")
        if write:
            _write_ahead(connection, database.failures)
            connection.execute("PRAGMA synchronous=FULL")
        if not present:
            with database.writing():
                for statement in SQLITE:
                    database.rows(statement)
    except BaseException:
        connection.close()
        raise


def _write_ahead(connection: Any, failures: tuple[type[Exception], ...]) -> None:
    """Switch to the write-ahead log; SQLite itself does not wait where others do the same."""
    deadline = time.monotonic() + WAIT
    while True:
        try:
            connection.execute("PRAGMA journal_mode=WAL")
            return
        except failures as error:
            if not _name_of(error).startswith("SQLITE_BUSY") or time.monotonic() > deadline:
                raise
        time.sleep(0.01)


def _postgresql(place: Place, *, write: bool) -> Database:
    check_driver()
    import psycopg  # noqa: PLC0415

    begin = (
        "BEGIN ISOLATION LEVEL READ COMMITTED",
        "LOCK TABLE headrace_entries IN EXCLUSIVE MODE",
    )
    try:
        connection = psycopg.connect(place.address, autocommit=True, connect_timeout=int(WAIT))
    except (psycopg.Error, UnicodeError) as error:
        raise _failure(place, error) from None
    database = Database(connection, place, begin, (psycopg.Error, UnicodeError))
    try:
        database.rows(f"SET lock_timeout = '{WAIT:g}s'")
        there = database.rows("SELECT to_regclass('headrace_entries') IS NOT NULL")[0][0]
        if not there and not write:
            raise JournalError(f"journal {place}: there is none yet; it begins with the first plan")
        if not there:
            _make_tables(database)
    except BaseException:
        connection.close()
        raise
    return database


def _make_tables(database: Database) -> None:
    """Tables and triggers, made once by whoever comes first."""
    with database.connection.transaction(), database._told():
        database.connection.execute("SELECT pg_advisory_xact_lock(7041)")
        for statement in POSTGRESQL:
            database.connection.execute(statement)


def _cause(place: Place, error: Exception) -> str:
    """SQLite's name of what is wrong; a full or read-only disk hides behind several."""
    code = _name_of(error)
    folder = Path(place.address).absolute().parent
    if code.startswith(("SQLITE_CANTOPEN", "SQLITE_IOERR")) and folder.is_dir():
        if not os.access(folder, os.W_OK):
            return "SQLITE_READONLY"
        if shutil.disk_usage(folder).free < _LITTLE:
            return "SQLITE_FULL"
    return code


def _failure(place: Place, error: Exception) -> JournalError:
    if not place.is_server:
        code = "SQLITE_CORRUPT" if isinstance(error, UnicodeError) else _cause(place, error)
        known = next((text for name, text in _REMEDIES.items() if code.startswith(name)), None)
        return JournalError(f"journal {place}: {known or error}")
    lines = str(error).strip().splitlines() or [type(error).__name__]
    return JournalError(f"journal {place}: {lines[0]}; check the server and the address")
