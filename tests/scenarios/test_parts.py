"""A run that was stopped goes on; a changed one is refused; nothing is written on a refusal."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from scheduler import InfeasibleError, MisuseError, OutputError, WhatIf
from scheduler.scenarios import Study, study
from scheduler.tables.write import to_json
from tests.desk import name, task
from tests.test_what_if import TWO, tried

GRID = {"volume": [0.5, 1.0, 2.0], "urgency": [0.0, 0.1, 1.0]}


@pytest.fixture
def solved(monkeypatch: pytest.MonkeyPatch) -> Iterator[list[int]]:
    """Small chunks, and a record of the points that were solved."""
    record: list[int] = []
    plain = Study.rows

    def watched(self: Study, points: Any, progress: Any = None) -> pd.DataFrame:
        found = plain(self, points, progress)
        record.extend(points.tolist())
        return found

    monkeypatch.setattr(study, "_CHUNK", 100)
    monkeypatch.setattr(Study, "rows", watched)
    return record


def run(out: Path | None, grid: dict[str, Any] = GRID, **options: Any) -> WhatIf:
    return tried(*TWO, grid, out=out, **options)


def stopped(out: Path, after: int) -> None:
    """A run that is interrupted once so many rows are done."""

    def interrupt(done: int, _all: int) -> None:
        if done >= after:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run(out, progress=interrupt)


def test_a_stopped_run_goes_on(tmp_path: Path, solved: list[int]) -> None:
    """Equal to one that was never stopped; what was finished is not solved again."""
    whole = run(None)
    assert sorted(solved) == list(range(10))
    solved.clear()
    stopped(tmp_path / "out", after=9)
    kept = len(list((tmp_path / "out" / "parts").glob("*.parquet")))
    assert 0 < kept < len(whole.study.chunks)
    before = set(solved[: sum(map(len, whole.study.chunks[:kept]))])
    solved.clear()
    again = run(tmp_path / "out")
    assert set(solved).isdisjoint(before)
    assert set(solved) | before == set(range(10))
    pd.testing.assert_frame_equal(again.scenarios, whole.scenarios)
    assert to_json(again.summary) == to_json(whole.summary)


def test_a_finished_run_solves_nothing_again(tmp_path: Path, solved: list[int]) -> None:
    """And tells its progress all the same; the parts are one Parquet table."""
    whole = run(tmp_path)
    solved.clear()
    told: list[tuple[int, int]] = []
    again = run(tmp_path, progress=lambda done, total: told.append((done, total)))
    assert solved == []
    assert told[-1] == (20, 20)
    pd.testing.assert_frame_equal(again.scenarios, whole.scenarios)
    parts = pd.read_parquet(tmp_path / "parts").sort_values("point", kind="stable")
    assert parts["objective"].tolist() == whole.scenarios["objective"].tolist()


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"grid": {"urgency": [0.5]}}, "grid"),
        ({"urgency": 3.0}, r"settings \(plan\)"),
        ({"at": "10:00"}, "other at;"),
        ({"finish": "0.5@14:00"}, "finish"),
        ({"readings": pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": [0.1]})}, "inputs"),
    ],
)
def test_a_changed_run_is_refused(
    tmp_path: Path, solved: list[int], changes: dict[str, Any], message: str
) -> None:
    """Told what differs; the parts stay. With `fresh` it starts anew."""
    run(tmp_path)
    files = {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}
    grid = changes.pop("grid", GRID)
    with pytest.raises(MisuseError, match=f"parts of a run with .*{message}.*--fresh"):
        run(tmp_path, grid, **changes)
    assert {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()} == files
    solved.clear()
    fresh = run(tmp_path, grid, fresh=True, **changes)
    assert len(solved) == len(fresh.grid) + 1
    pd.testing.assert_frame_equal(run(None, grid, **changes).scenarios, fresh.scenarios)


def test_changed_orders_are_refused_by_name(tmp_path: Path) -> None:
    tried(task(20_000), name(), GRID, out=tmp_path)
    with pytest.raises(MisuseError, match=r"other inputs \(orders\);"):
        tried(task(20_001), name(), GRID, out=tmp_path)


def test_without_a_time_the_same_command_means_the_same_moment(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The present of the first run is kept, so that the second goes on from it."""
    moments = iter(["2026-03-05T15:00:07Z", "2026-03-05T15:09:00Z"])
    monkeypatch.setattr(
        pd.Timestamp, "now", classmethod(lambda _cls, tz=None: pd.Timestamp(next(moments)))
    )
    first = run(tmp_path, at=None)
    second = run(tmp_path, at=None)
    assert first.summary["at"] == second.summary["at"] == "2026-03-05T15:00:07+00:00"


def test_nothing_is_written_on_a_refusal(tmp_path: Path) -> None:
    out = tmp_path / "out"
    with pytest.raises(InfeasibleError):
        tried(task(2e6), name(), GRID, out=out, max_participation=0.01)
    assert not out.exists()


def test_a_damaged_manifest_is_told(tmp_path: Path) -> None:
    run(tmp_path)
    (tmp_path / "parts" / "_manifest.json").write_text("{")
    with pytest.raises(OutputError, match=r"cannot read .*_manifest\.json"):
        run(tmp_path)


def test_files_of_a_result(tmp_path: Path) -> None:
    """Table and summary, as CSV or Parquet; the other form of an earlier run goes."""
    result = run(None)
    result.write(tmp_path)
    frame = pd.read_csv(tmp_path / "scenarios.csv")
    assert frame.columns.tolist() == result.scenarios.columns.tolist()
    assert frame["objective"].tolist() == result.scenarios["objective"].tolist()
    summary = json.loads((tmp_path / "summary.json").read_text())
    assert summary["grid"] == {"volume": [0.5, 1.0, 2.0], "urgency": [0.0, 0.1, 1.0]}
    assert len(summary["points"]) == 10
    assert "not advice" in summary["caution"]
    result.write(tmp_path, parquet=True)
    assert {path.name for path in tmp_path.iterdir()} == {"scenarios.parquet", "summary.json"}
