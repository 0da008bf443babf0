"""`headrace review`: a written plan and fills in, files, streams and messages out."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from click.testing import CliRunner, Result

from scheduler import plan
from scheduler.cli import main
from tests.cli.running import Put
from tests.filled import on_plan
from tests.samples import MARKET, ORDERS, csv_text

CLOSES = "symbol,close\nQUAY,102\nMILL,7.4\n"


@pytest.fixture
def written(put: Put, tmp_path: Path) -> list[str]:
    """The words for a plan's directory, its fills and closes."""
    tables = {key: put(f"{key}.csv", csv_text(t)) for key, t in tables_of().items()}
    made = plan(tables["orders"], tables["market"], date="2026-03-05", at="09:30")
    made.write(tmp_path / "plan")
    fills = on_plan(made, "2026-03-05T15:00:00-05:00")
    named = {"--fills": put("fills.csv", csv_text(fills)), "--closes": put("closes.csv", CLOSES)}
    return [str(tmp_path / "plan"), *(word for pair in named.items() for word in pair)]


def tables_of() -> dict[str, Any]:
    return {"orders": ORDERS, "market": MARKET}


def run(*args: object, **options: Any) -> Result:
    result = CliRunner().invoke(main, ["review", *map(str, args)], **options)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def test_files_text_and_streams(written: list[str], tmp_path: Path) -> None:
    """Tables, figures and page in the directory, text on stdout, notes on stderr."""
    out = tmp_path / "out"
    result = run(*written, "--out", out, "--report")
    assert result.exit_code == 0
    names = {path.name for path in out.iterdir()}
    assert names == {"shortfall.csv", "groups.csv", "fills.csv", "review.json", "review.html"}
    summary = json.loads((out / "review.json").read_text())
    orders = pd.read_csv(out / "shortfall.csv")
    assert set(summary["orders"]) == set(orders["order_id"]) == {"o-1", "o-2"}
    assert summary["total"]["shortfall"] == pytest.approx(orders["shortfall"].sum())
    assert "flagged, at a chance of 0.05" in result.stdout
    assert "Note: fills without a fee" in result.stderr
    page = (out / "review.html").read_text()
    assert "Estimates, not advice" in page
    assert page.count("<option") == 3
    assert "http" not in page.split("</head>")[0].replace("http-equiv", "")


def test_json_is_the_summary_alone(written: list[str]) -> None:
    summary = json.loads(run(*written, "--json", "--false-alarms", "0.1").stdout)
    assert summary["asked"] == {"false_alarms": 0.1}
    assert {row["by"] for row in summary["groups"]} >= {"side", "size", "time of day"}


def test_parquet_takes_the_place_of_csv(written: list[str], tmp_path: Path) -> None:
    for words in ((), ("--parquet",)):
        assert run(*written, "--out", tmp_path / "out", *words).exit_code == 0
    assert not list((tmp_path / "out").glob("*.csv"))
    assert len(pd.read_parquet(tmp_path / "out" / "shortfall.parquet")) == 2


def test_misuse_is_said_in_words_and_nothing_is_written(written: list[str], tmp_path: Path) -> None:
    """Exit status 2."""
    folder, fills, closes = written[0], written[1:3], written[3:]
    for words, said in (
        ([folder], "give the fills with --fills FILE"),
        ([folder, *fills, "--out", tmp_path / "out"], "give a closes table"),
        ([*written, "--report"], "give a directory with --out"),
        ([*written, "--false-alarms", "2", "--out", tmp_path / "out"], "false_alarms must be"),
        ([tmp_path, *fills, *closes], "there is no plan here"),
        ([*written, "--out", tmp_path], "was read for this run"),
    ):
        result = run(*words)
        assert result.exit_code == 2, said
        assert said in " ".join(result.stderr.split())
        assert not (tmp_path / "out").exists()
