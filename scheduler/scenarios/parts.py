"""What is kept of a run while it goes on: each finished chunk as a Parquet file of its own.

The folder `parts` of the output directory is a partitioned Parquet table; its manifest says what
it was made from, so that only the same run goes on from it.
"""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from scheduler.errors import MisuseError, OutputError
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs
from scheduler.tables.write import arrow, to_json, write_file

FOLDER = "parts"
_MANIFEST = "_manifest.json"


def fingerprints(inputs: Inputs) -> dict[str, str]:
    """A digest of every table's checked content, by the table's name."""
    tables = {name: table for name, table in vars(inputs).items() if isinstance(table, Checked)}
    return {
        name: hashlib.sha256(table.frame.to_csv(index=False).encode()).hexdigest()
        for name, table in tables.items()
    }


@dataclass(frozen=True)
class Parts:
    """The parts of a run under a directory."""

    directory: Path

    @property
    def folder(self) -> Path:
        return self.directory / FOLDER

    def manifest(self) -> dict[str, Any] | None:
        """What the parts that are there were made from; None if there are none.

        Raises:
            OutputError: the manifest cannot be read.
        """
        path = self.folder / _MANIFEST
        if not path.exists():
            return None
        try:
            found = json.loads(path.read_text(encoding="utf-8"))
        except (OSError, ValueError) as error:
            raise OutputError(f"cannot read {path}: {error}; delete it to start anew") from error
        return dict(found)

    def begin(self, manifest: Mapping[str, Any], *, fresh: bool) -> None:
        """Go on from the parts of the same run, or start.

        Raises:
            MisuseError: there are parts of another run, and not `fresh`.
        """
        wanted = json.loads(to_json(manifest))
        known = None if fresh else self.manifest()
        if known is not None:
            other = _differences(known, wanted)
            if other:
                raise MisuseError(
                    f"{self.folder} holds parts of a run with other {', '.join(other)}; start anew "
                    "with --fresh (fresh=True), or write to another directory"
                )
            return
        self.folder.mkdir(parents=True, exist_ok=True)
        for path in (self.folder / _MANIFEST, *self.folder.glob("part-*.parquet")):
            path.unlink(missing_ok=True)
        write_file(self.folder / _MANIFEST, manifest)

    def finished(self, number: int) -> bool:
        """Whether a part is there."""
        return self.path(number).exists()

    def write(self, number: int, rows: pd.DataFrame) -> None:
        """Keep the rows of a part, whole or not at all."""
        import pyarrow.parquet as pq  # noqa: PLC0415 - slow to load

        data = io.BytesIO()
        pq.write_table(arrow(rows), data)
        write_file(self.path(number), data.getvalue())

    def path(self, number: int) -> Path:
        """Where a part is, or will be."""
        return self.folder / f"part-{number:05d}.parquet"


def _differences(known: Mapping[str, Any], wanted: Mapping[str, Any]) -> list[str]:
    """Which entries differ; of tables and settings, which ones. The moment follows from others."""
    found = []
    for name in sorted((known.keys() | wanted.keys()) - {"now"}):
        one, other = known.get(name), wanted.get(name)
        if one == other:
            continue
        if isinstance(one, Mapping) and isinstance(other, Mapping):
            inside = [key for key in {**one, **other} if one.get(key) != other.get(key)]
            found.append(f"{name} ({', '.join(inside)})")
        else:
            found.append(name)
    return found
