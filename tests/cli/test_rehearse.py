"""`headrace rehearse`: files, streams and messages."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from click.testing import CliRunner, Result

from scheduler.cli import main
from tests.cli.running import WHEN, Put, arguments
from tests.samples import MARKET, ORDERS, csv_text


@pytest.fixture
def files(put: Put) -> list[str]:
    """The words for orders and market that fit together, a time and a few paths."""
    tables = {"orders": ORDERS, "market": MARKET}
    made = {key: put(f"{key}.csv", csv_text(table)) for key, table in tables.items()}
    return [*arguments(made), *WHEN, "--paths", "200"]


def run(*args: object, **options: Any) -> Result:
    result = CliRunner().invoke(main, ["rehearse", *map(str, args)], **options)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def test_files_text_and_streams(files: list[str], tmp_path: Path) -> None:
    """Figures, page and paths in the directory, text on stdout, notes on stderr."""
    out = tmp_path / "out"
    result = run(*files, "--out", out, "--report", "--keep-paths")
    assert result.exit_code == 0
    written = {path.name for path in out.iterdir()}
    assert written == {"rehearsal.json", "rehearsal.html", "paths.parquet"}
    summary = json.loads((out / "rehearsal.json").read_text())
    assert set(summary["orders"]) == {"o-1", "o-2"}
    assert summary["asked"]["paths"] == 200
    paths = pd.read_parquet(out / "paths.parquet")
    assert len(paths) == 2 * 2 * 200
    assert "promised" in result.stdout
    assert "volume at random: " in result.stdout
    assert f"Written to {out}" in result.stderr
    page = (out / "rehearsal.html").read_text()
    assert "Estimates, not advice" in page
    assert "http" not in page.split("</head>")[0].replace("http-equiv", "")


def test_json_is_the_summary_alone(files: list[str]) -> None:
    summary = json.loads(run(*files, "--json").stdout)
    assert summary["orders"]["o-1"]["volume_as_forecast"]["paths"] == 200


def test_numbers_out_of_range_and_files_without_a_place(files: list[str], tmp_path: Path) -> None:
    """Exit status 2, said in words, nothing written."""
    for words, said in (
        (("--paths", "1"), "paths must be from 2"),
        (("--session-noise", "9"), "session_noise must be from 0 to 3"),
        (("--report",), "give a directory with --out"),
    ):
        where = () if words == ("--report",) else ("--out", tmp_path / "out")
        result = run(*files, *words, *where)
        assert result.exit_code == 2
        assert said in result.stderr
        assert not (tmp_path / "out").exists()


def test_the_page_draws_without_complaint(files: list[str], tmp_path: Path) -> None:
    """What the charts are drawn from is there, in numbers that JSON can hold."""
    from scheduler import plan, rehearse
    from scheduler.report.rehearsal_page import page

    made = plan(pd.DataFrame(ORDERS), pd.DataFrame(MARKET), date="2026-03-05", at="09:30")
    html = page(rehearse(made, paths=50))
    assert html.count("<option") == 2
    assert 'id="data"' in html
