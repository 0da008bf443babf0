"""Reading an entry back: its manifest, its inputs as tables to plan from, its outputs as frames."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import Any

import pandas as pd

from scheduler.journal.chain import Entry
from scheduler.journal.store import Journal
from scheduler.tables.source import PARQUET, Stored
from scheduler.tables.write import encode


def manifest_of(journal: Journal, entry: Entry) -> dict[str, Any]:
    """What an entry says of inputs, outputs, settings and versions."""
    manifest: dict[str, Any] = json.loads(journal.content(entry.manifest))
    return manifest


def inputs_of(journal: Journal, manifest: dict[str, Any]) -> dict[str, Stored]:
    """The tables that were read, byte for byte, by option."""
    return {
        name: Stored(part["source"], journal.content(part["sha256"]), part["form"])
        for name, part in manifest["inputs"].items()
    }


def outputs_of(journal: Journal, manifest: dict[str, Any]) -> dict[str, bytes]:
    """The files that were written, by name."""
    return {name: journal.content(part["sha256"]) for name, part in manifest["outputs"].items()}


def as_cells(name: str, data: bytes) -> pd.DataFrame:
    """A table that was written, every cell as it stands: text of a CSV, values of Parquet."""
    if Path(name).suffix in PARQUET:
        return pd.read_parquet(io.BytesIO(data))
    return pd.read_csv(io.BytesIO(data), dtype=str, keep_default_na=False)


def slices_of(files: dict[str, bytes]) -> pd.DataFrame | None:
    """Orders, starts and shares of the schedule among an entry's files."""
    columns = {"order_id": str, "start": str, "shares": float}
    for name, data in files.items():
        if name == "schedule.csv":
            table = io.BytesIO(data)
            return pd.read_csv(table, usecols=list(columns), dtype=columns, keep_default_na=False)
        if name == "schedule.parquet":
            return pd.read_parquet(io.BytesIO(data), columns=list(columns))
    return None


def exported(journal: Journal, entry: Entry) -> dict[str, bytes]:
    """An entry's files by name: what was read as `read-TABLE`, what was written, `entry.json`."""
    manifest = manifest_of(journal, entry)
    read = {
        f"read-{name}.{stored.form}": stored.data
        for name, stored in inputs_of(journal, manifest).items()
    }
    page = encode("entry.json", {**entry._asdict(), "manifest": manifest})
    return {**read, **outputs_of(journal, manifest), "entry.json": page}
