"""The journal: what it adds to a plan, and listing many entries, each beside a baseline."""

from __future__ import annotations

import contextlib
import secrets
import sqlite3
import tempfile
import time
from pathlib import Path

import numpy as np

from benchmarks.scenarios import desk
from benchmarks.timing import milliseconds, table
from scheduler.cli.show_journal import listing
from scheduler.journal.entries import record_plan
from scheduler.journal.store import Journal
from scheduler.journal.verify import verify
from scheduler.plan import Plan, plan
from scheduler.settings import Settings

_ENTRIES, _ROUNDS = 100_000, 9


def run() -> None:
    with tempfile.TemporaryDirectory() as folder:
        rows = [_adds(Path(folder), orders) for orders in (1, 50, 1000)]
        header = ("plan", "planning", "its files", "the journal adds", "a bare insert")
        header += ("ratio to the insert", "share of planning and files")
        title = (
            "Journal: what an entry adds to a plan (opening, hashing, compressing, a commit to the "
            "disk), beside a bare insert of the same bytes under the same settings of SQLite:"
        )
        print(table(title, header, rows))
        print(table(f"{_ENTRIES:,} entries:", *_many(Path(folder))))


def _adds(folder: Path, orders: int) -> tuple[str, ...]:
    """Median times; each round plans anew with another urgency, so that outputs are new."""
    ours, bare, planning, files = [], [], [], []
    place = str(folder / f"journal-{orders}.db")
    for number in range(_ROUNDS):
        clock = time.perf_counter()
        made = _planned(orders, 0.1 + 0.01 * number)
        planning.append(time.perf_counter() - clock)
        clock = time.perf_counter()
        made.write(folder / "out")
        files.append(time.perf_counter() - clock)
        clock = time.perf_counter()
        with Journal(place) as journal:
            record_plan(journal, made)
        ours.append(time.perf_counter() - clock)
        bare.append(_inserted(folder / "bare.db", made))
    of_plan, of_files, of_ours, of_bare = (
        float(np.median(each[1:])) for each in (planning, files, ours, bare)
    )
    return (
        f"{orders:,} x 26",
        *map(milliseconds, (of_plan, of_files, of_ours, of_bare)),
        f"{of_ours / of_bare:.1f}",
        f"{of_ours / (of_plan + of_files):.1%}",
    )


def _planned(orders: int, urgency: float) -> Plan:
    tables = desk(orders)
    settings = Settings().with_values("plan", urgency=urgency)
    return plan(*tables, settings=settings, date="2026-03-05", at="09:30")


def _inserted(path: Path, made: Plan) -> float:
    """Seconds to open a database and insert the outputs as they are."""
    data = b"".join(made.files().values())
    clock = time.perf_counter()
    with contextlib.closing(sqlite3.connect(path, isolation_level=None)) as connection:
        connection.execute("PRAGMA journal_mode=WAL")
        connection.execute("PRAGMA synchronous=FULL")
        connection.execute("CREATE TABLE IF NOT EXISTS kept (name TEXT PRIMARY KEY, data BLOB)")
        connection.execute("INSERT INTO kept VALUES (?, ?)", (secrets.token_hex(8), data))
    return time.perf_counter() - clock


def _many(folder: Path) -> tuple[tuple[str, ...], list[tuple[str, ...]]]:
    place = folder / "many.db"
    with Journal(str(place)) as journal:
        journal.database.rows("PRAGMA synchronous=OFF")  # only to fill it sooner
        brief = {"session": "2026-03-05", "orders": 5, "currency": "USD", "optimum": "proven"}
        for number in range(_ENTRIES):
            more = {"notional": 1e6 + number, "cost_bps": 12.345}
            manifest = {"inputs": {}, "outputs": {}, "number": number}
            journal.append("plan", brief=brief | more, manifest=manifest)
    baseline = _seconds(lambda: _read(place))
    cases = (
        ("reading all entries", lambda: _entries(place)),
        ("list --all, as text", lambda: listing(_entries(place))),
        ("list, the newest 20", lambda: listing(_entries(place, 20))),
        ("verify", lambda: _verified(place)),
    )
    rows = []
    for name, call in cases:
        seconds = _seconds(call)
        rows.append(
            (name, milliseconds(seconds), milliseconds(baseline), f"{seconds / baseline:.2g}")
        )
    return ("what", "time", "bare SELECT of all rows", "ratio"), rows


def _seconds(call: object) -> float:
    assert callable(call)
    best = np.inf
    for _ in range(3):
        clock = time.perf_counter()
        call()
        best = min(best, time.perf_counter() - clock)
    return float(best)


def _read(path: Path) -> list[tuple[object, ...]]:
    with contextlib.closing(sqlite3.connect(path)) as connection:
        return connection.execute("SELECT * FROM headrace_entries").fetchall()


def _entries(path: Path, newest: int | None = None) -> list[object]:
    with Journal(str(path), write=False) as journal:
        return list(journal.entries(newest))


def _verified(path: Path) -> None:
    with Journal(str(path), write=False) as journal:
        assert verify(journal).sound
