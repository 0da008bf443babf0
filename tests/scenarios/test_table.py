"""A table that stays on disk says what one in memory says, and is refused where it has no place."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow.parquet as pq
import pytest

from scheduler import MisuseError, WhatIf
from scheduler.cli.show_what_if import what_if_text
from scheduler.scenarios import study, table, working
from scheduler.tables.write import to_json
from tests.test_what_if import TWO, tried

GRID = {"volume": [0.5, 1.0, 2.0], "urgency": "0.02:3:8", "end": ["09:31", "13:00", "15:30"]}
"""The axes run through the parts in another order than through the points."""


@pytest.fixture
def on_disk(monkeypatch: pytest.MonkeyPatch) -> None:
    """With a directory nothing is held; blocks and parts are small, and cut each other."""
    monkeypatch.setattr(table, "_BLOCK", 60)
    monkeypatch.setattr(study, "_CHUNK", 700)
    monkeypatch.setattr(working, "HELD", 0)


@pytest.fixture
def held(monkeypatch: pytest.MonkeyPatch) -> WhatIf:
    """The grid in memory, of the same parts."""
    monkeypatch.setattr(study, "_CHUNK", 700)
    return run()


def run(**options: Any) -> WhatIf:
    return tried(*TWO, GRID, **options)


def test_the_same_table_and_summary(held: WhatIf, on_disk: None, tmp_path: Path) -> None:
    """Row for row, knees, totals and the text of the terminal; only a note is added."""
    kept = run(out=tmp_path)
    assert kept.table.held is None
    assert len(kept.table.kept) > 3
    assert [len(rows) for rows in kept.table.by_points()] == [60, 60, 26]
    assert [len(rows) for rows in kept.table.by_orders()] == [73, 73]
    pd.testing.assert_frame_equal(
        held.scenarios, kept.scenarios, check_exact=True, check_dtype=False
    )
    assert kept.notes[:-1] == held.notes
    assert "stays on disk" in kept.notes[-1]
    assert what_if_text(kept) == what_if_text(held)
    mine, other = kept.summary | {"notes": []}, held.summary | {"notes": []}
    knees = [sorted(map(str, summary.pop("knees"))) for summary in (mine, other)]
    assert knees[0] == knees[1]
    assert to_json(mine) == to_json(other)


@pytest.mark.parametrize("parquet", [False, True])
def test_files_are_written_block_by_block(
    held: WhatIf, on_disk: None, tmp_path: Path, parquet: bool
) -> None:
    """The bytes of the CSV, the rows of the Parquet; never the whole table at once."""
    held.write(tmp_path / "held", parquet=parquet)
    kept = run(out=tmp_path / "kept")
    kept.write(tmp_path / "kept", parquet=parquet)
    name = f"scenarios.{'parquet' if parquet else 'csv'}"
    mine, other = tmp_path / "kept" / name, tmp_path / "held" / name
    if parquet:
        assert pq.ParquetFile(mine).num_row_groups == 3
        pd.testing.assert_frame_equal(pd.read_parquet(mine), pd.read_parquet(other))
    else:
        assert mine.read_bytes() == other.read_bytes()


def test_a_page_of_a_table_on_disk(held: WhatIf, on_disk: None, tmp_path: Path) -> None:
    """Its charts are the same."""
    kept = run(out=tmp_path)
    for name in ("frontier", "regret"):
        assert (
            kept.figure(name, "FELLSIDE-1").to_json() == held.figure(name, "FELLSIDE-1").to_json()
        )
    kept.write(tmp_path, report=True)
    assert (tmp_path / "report.html").stat().st_size > 100_000


def test_parts_are_one_table_for_any_reader(on_disk: None, tmp_path: Path) -> None:
    """Every part has the same columns and types, also where a column is empty."""
    kept = run(out=tmp_path)
    schemas = [pq.read_schema(path).remove_metadata() for path in kept.table.kept]
    assert all(schema.equals(schemas[0]) for schema in schemas)


def test_totals_of_very_many_points_are_left_out(
    on_disk: None, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """The summary stays small; the base and the counts are there."""
    monkeypatch.setattr("scheduler.scenarios.gist.LISTED", 72)
    summary = run(out=tmp_path).summary
    assert summary["points"] == []
    assert [row["order_id"] for row in summary["base"]] == ["OAKMERE-1", "FELLSIDE-1"]
    assert sum(summary["status"].values()) == 146


def test_a_table_without_a_place_is_refused(tmp_path: Path) -> None:
    """Before anything is solved."""
    grid = {"urgency": "0.01:10:1000", "volume": "0.5:2:1000"}
    with pytest.raises(MisuseError, match=r"2,000,002 rows; more than 500,000 .* --out"):
        tried(*TWO, grid)
