"""`headrace what-if`: files, streams and messages."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from click.testing import CliRunner, Result

from scheduler.cli import main
from scheduler.scenarios import study
from tests.cli.running import WHEN, Put, arguments
from tests.samples import MARKET, ORDERS, csv_text

VARY = ("--vary", "urgency=0,0.01:10:6", "--vary", "volume=0.5,1")


@pytest.fixture
def files(put: Put) -> list[str]:
    """The words for orders and market that fit together, and a time."""
    tables = {"orders": ORDERS, "market": MARKET}
    made = {key: put(f"{key}.csv", csv_text(table)) for key, table in tables.items()}
    return [*arguments(made), *WHEN]


def run(*args: object, **options: Any) -> Result:
    result = CliRunner().invoke(main, ["what-if", *map(str, args)], **options)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def test_files_text_and_streams(files: list[str], tmp_path: Path) -> None:
    """Table, summary and parts in the directory, text on stdout, notes on stderr."""
    out = tmp_path / "out"
    result = run(*files, *VARY, "--out", out)
    assert result.exit_code == 0
    assert {path.name for path in out.iterdir()} == {"scenarios.csv", "summary.json", "parts"}
    frame = pd.read_csv(out / "scenarios.csv")
    assert len(frame) == 2 * (7 * 2 + 1)
    assert sorted(frame["urgency"].dropna().unique())[:2] == [0.0, 0.01]
    assert "14 points (7 urgency x 2 volume) and the base, 2 orders: 30 proven" in result.stdout
    assert "knee at urgency" in result.stdout
    assert "worst regret bps" in result.stdout
    notes = result.stderr.splitlines()
    assert notes[0].startswith("Note: Figures are before whole lots")
    assert notes[-1] == f"Written to {out}"


def test_few_rows_are_shown_and_not_written(files: list[str], tmp_path: Path) -> None:
    before = set(tmp_path.iterdir())
    result = run(*files, "--vary", "end=09:45,15:00")
    assert result.exit_code == 0
    assert "2 orders: 5 proven, 1 infeasible" in result.stdout  # o-1 starts at 10:00
    assert result.stdout.splitlines()[-1].split()[:2] == ["o-2", "15:00:00"]
    assert set(tmp_path.iterdir()) == before


def test_json_and_csv_alone_on_stdout(files: list[str]) -> None:
    found = json.loads(run(*files, *VARY, "--json").stdout)
    assert found["grid"]["volume"] == [0.5, 1.0]
    assert len(found["knees"]) == 4
    piped = run(*files, *VARY, "--out", "-")
    frame = pd.read_csv(io.StringIO(piped.stdout))
    assert len(frame) == 30
    assert frame["knee"].sum() == sum("urgency" in knee for knee in found["knees"])


def test_parquet_and_quiet(files: list[str], tmp_path: Path) -> None:
    result = run(*files, *VARY, "--parquet", "--quiet", "--out", tmp_path / "out")
    assert (result.exit_code, result.output) == (0, "")
    assert len(pd.read_parquet(tmp_path / "out" / "scenarios.parquet")) == 30


def test_a_stopped_command_says_so_and_goes_on(
    files: list[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ctrl-C keeps the finished parts; the same command finishes, and only then are there files."""
    monkeypatch.setattr(study, "_CHUNK", 100)
    plain = study.Study.rows
    calls = []

    def interrupted(self: study.Study, points: Any, progress: Any = None) -> pd.DataFrame:
        calls.append(len(points))
        if len(calls) == 3:
            raise KeyboardInterrupt
        return plain(self, points, progress)

    monkeypatch.setattr(study.Study, "rows", interrupted)
    out = tmp_path / "out"
    stopped = run(*files, *VARY, "--out", out)
    assert stopped.exit_code == 1
    assert "the same command goes on from there" in stopped.stderr
    assert [path.name for path in out.iterdir()] == ["parts"]
    assert run(*files, *VARY, "--out", out).exit_code == 0
    assert sum(calls) == 15 + calls[2]
    other = run(*files, "--vary", "volume=3", "--out", out)
    assert other.exit_code == 2
    assert "parts of a run with other grid" in other.stderr
    assert run(*files, "--vary", "volume=3", "--out", out, "--fresh").exit_code == 0
    assert len(pd.read_csv(out / "scenarios.csv")) == 4


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (("--vary", "urgency=1", "--vary", "urgency=2"), "axis urgency: is given twice"),
        (("--vary", "urgency"), "axis urgency: has no values; write AXIS=VALUE"),
        (("--vary", "speed=1"), "axis speed: is no axis; axes: urgency, "),
        (("--vary", "volume=0"), "axis volume: must be a number from 0.01 to 100, got '0'"),
        (("--vary", "volume=1", "--corridors", "c.csv"), "what-if solves every order alone"),
        (("--vary", "volume=0.01:1:20000000"), "20,000,000 rows to solve"),
        (("--vary", "volume=1", "--fresh"), "give a directory with --out"),
        (("--vary", "volume=1", "--json", "--out", "-"), "both write to standard output"),
        ((), "Missing option '--vary'"),
    ],
)
def test_refusals(files: list[str], tmp_path: Path, args: tuple[str, ...], message: str) -> None:
    """Status 2, one clear message, nothing written."""
    before = set(tmp_path.iterdir())
    result = run(
        *files,
        *args,
        *(("--out", tmp_path / "out") if "--out" not in args and "--fresh" not in args else ()),
    )
    assert result.exit_code == 2
    assert message in result.stderr
    assert set(tmp_path.iterdir()) == before


def test_an_infeasible_base_is_status_1(files: list[str], tmp_path: Path) -> None:
    result = run(*files, "--vary", "volume=1", "--finish", "1@09:31", "--out", tmp_path / "out")
    assert result.exit_code == 1
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("--workers", "0"), "Error: workers must be a whole number from 1 on, got 0;"),
        (("--workers", "2", "--cluster", "tcp://127.0.0.1:9"), "give --workers or --cluster"),
        (("--cluster", "nowhere"), "Error: there is no Dask scheduler at 'nowhere'"),
    ],
)
def test_workers_that_cannot_be(
    files: list[str], tmp_path: Path, words: tuple[str, ...], message: str
) -> None:
    """A sentence, exit status 2, nothing written."""
    result = run(*files, *VARY, *words, "--out", tmp_path / "out")
    assert result.exit_code == 2
    assert message in result.stderr
    assert not (tmp_path / "out").exists()


def test_workers_leave_the_same_files(files: list[str], tmp_path: Path) -> None:
    """And say no more than one process does."""
    alone = run(*files, *VARY, "--out", tmp_path / "alone")
    shared = run(*files, *VARY, "--out", tmp_path / "shared", "--workers", "1")
    assert (shared.exit_code, shared.stdout) == (0, alone.stdout)
    assert shared.stderr == alone.stderr.replace("alone", "shared")
    frames = [pd.read_csv(tmp_path / name / "scenarios.csv") for name in ("alone", "shared")]
    pd.testing.assert_frame_equal(*frames, rtol=1e-10, atol=1e-8)
