"""Small entries, written here or by other processes.

`python -m tests.journal.writing PLACE COUNT NAME` appends entries and says the number of each on a
line of its own as soon as it is kept; a COUNT of 0 goes on until the process is killed.
"""

from __future__ import annotations

import itertools
import subprocess
import sys
from pathlib import Path

from scheduler.journal.chain import Entry, digest
from scheduler.journal.store import Journal

ROOT = Path(__file__).parents[2]


def add(journal: Journal, text: str, kind: str = "plan") -> Entry:
    """An entry that read and wrote one small file each; all read the same."""
    files = {"orders": b"order_id,symbol\nA,MILL\n", "schedule.csv": f"{text}\n".encode()}
    named = [
        {"sha256": digest(data), "bytes": len(data), "source": name, "form": "csv"}
        for name, data in files.items()
    ]
    manifest = {"inputs": {"orders": named[0]}, "outputs": {"schedule.csv": named[1]}}
    return journal.append(
        kind, brief={"orders": 1, "text": text}, manifest=manifest, contents=files.values()
    )


def start(place: str, count: int, name: str) -> subprocess.Popen[str]:
    """A process that writes."""
    command = [sys.executable, "-m", "tests.journal.writing", place, str(count), name]
    return subprocess.Popen(command, stdout=subprocess.PIPE, text=True, cwd=ROOT)


def main() -> None:
    place, count, name = sys.argv[1], int(sys.argv[2]), sys.argv[3]
    with Journal(place) as journal:
        for number in range(count) if count else itertools.count():
            entry = add(journal, f"{name} {number}")
            sys.stdout.write(f"{entry.number}\n")
            sys.stdout.flush()


if __name__ == "__main__":
    main()
