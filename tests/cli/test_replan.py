"""`headrace replan`: files, streams, messages, and following a file until asked to stop."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from click.testing import CliRunner, Result

from scheduler.cli import main
from tests.cli.running import EXAMPLES, WHEN, Put, arguments
from tests.cli.running import run as plan
from tests.samples import MARKET, ORDERS, csv_text

FILLS = "order_id,time,quantity,price\no-1,10:20,1500,101.3\no-2,09:40,100,7.49\n"


@pytest.fixture
def out(put: Put, tmp_path: Path) -> Path:
    """A written plan."""
    tables = {"orders": ORDERS, "market": MARKET}
    made = {key: put(f"{key}.csv", csv_text(rows)) for key, rows in tables.items()}
    assert plan(*arguments(made), *WHEN, "--out", tmp_path / "plan").exit_code == 0
    return tmp_path / "plan"


def run(*args: object, **options: Any) -> Result:
    result = CliRunner().invoke(main, ["replan", *map(str, args)], **options)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def test_files_text_and_streams(out: Path, put: Put, tmp_path: Path) -> None:
    rest = tmp_path / "rest"
    fills = put("fills.csv", FILLS)
    result = run(out, "--fills", fills, "--at", "11:00", "--out", rest, "--report")
    assert result.exit_code == 0
    assert {path.name for path in rest.iterdir()} == {
        "schedule.csv",
        "summary.json",
        "report.html",
        "replan.json",
        "replan.html",
        "progress.csv",
        "attribution.csv",
    }
    assert "what changes" in result.stdout
    assert "Note: the present price" in result.stderr
    schedule = pd.read_csv(rest / "schedule.csv", dtype={"order_id": str})
    assert schedule.groupby("order_id")["shares"].sum().to_dict()["o-2"] == 700
    summary = json.loads((rest / "replan.json").read_text())
    assert summary["orders"]["o-1"]["done"] == 1500
    assert json.loads((rest / "summary.json").read_text())["replanned"]["plan"] == str(out)
    page = (rest / "replan.html").read_text()
    assert "Estimates, not advice" in page
    assert "http" not in page.split("</head>")[0].replace("http-equiv", "")


def test_json_is_the_summary_alone(out: Path, put: Put) -> None:
    result = run(out, "--fills", put("fills.csv", FILLS), "--at", "11:00", "--json")
    assert json.loads(result.stdout)["orders"]["o-2"]["left"] == 700


def test_changes_on_the_command_line(out: Path, put: Put) -> None:
    """The plan's settings hold but for what is changed; another urgency is said."""
    fills = put("fills.csv", FILLS)
    words = ("--fills", fills, "--at", "11:00", "--json")
    kept = json.loads(run(out, *words).stdout)
    changed = json.loads(run(out, *words, "--urgency", "2", "--max-participation", "0.3").stdout)
    names = [
        [each["change"] for each in row["orders"]["o-1"]["changes"]] for row in (kept, changed)
    ]
    assert names == [["as planned", "fills", "now"], ["as planned", "fills", "settings", "now"]]


def test_misuse(out: Path, put: Put, tmp_path: Path) -> None:
    """Exit status 2, said in words, nothing written."""
    rest, fills = tmp_path / "rest", put("fills.csv", FILLS)
    for words, said in (
        (("--follow", fills), "belong together"),
        (("--follow", fills, "--every", "1s", "--at", "11:00"), "leave those out"),
        (("--follow", fills, "--every", "1s", "--json"), "--json is of one re-plan"),
        (("--follow", fills, "--every", "soon"), "is no time to wait"),
        (("--fills", fills, "--report"), "give a directory with --out"),
        (("--fills", fills, "--at", "11:00", "--date", "2026-03-06"), "--date cannot be another"),
        (("--fills", fills, "--at", "10:00", "--out", str(rest)), "is after 2026-03-05T15:00"),
    ):
        result = run(out, *words)
        assert result.exit_code == 2, words
        assert said in result.stderr, words
    assert not rest.exists()
    assert run(tmp_path / "nowhere", "--at", "11:00").exit_code == 2


def test_following_a_file_until_asked_to_stop(put: Put, tmp_path: Path) -> None:
    """Round the clock; a signal between rounds ends it with status 0 and whole files."""
    now = pd.Timestamp.now(tz="UTC").floor("s")
    market = {
        "symbol": ["QUAY"],
        "price": ["10"],
        "adv": ["2000000"],
        "daily_vol": ["0.02"],
        "calendar": ["24/7"],
    }
    end = (now + pd.Timedelta(hours=6)).isoformat()
    orders = {
        "order_id": ["o-1"],
        "symbol": ["QUAY"],
        "side": ["buy"],
        "quantity": ["20000"],
        "end": [end],
    }
    tables = {"orders": orders, "market": market}
    made = {key: put(f"{key}.csv", csv_text(rows)) for key, rows in tables.items()}
    when = ("--date", str(now.date()), "--at", now.isoformat(), "--bucket", "60")
    assert plan(*arguments(made), *when, "--out", tmp_path / "plan").exit_code == 0
    fills = put("fills.csv", f"order_id,time,quantity,price\no-1,{now.isoformat()},500,10.0\no-1,")
    words = ["replan", tmp_path / "plan", "--follow", fills, "--every", "1s"]
    command = [sys.executable, "-m", "scheduler", *map(str, words), "--out", str(tmp_path / "rest")]
    running = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    progress = tmp_path / "rest" / "progress.csv"
    deadline = time.monotonic() + 60.0
    while not progress.exists() and time.monotonic() < deadline:
        time.sleep(0.2)
    running.send_signal(signal.SIGTERM)
    said, errors = running.communicate(timeout=60)
    assert running.returncode == 0, errors
    assert "1 of 1 orders left" in said
    assert pd.read_csv(progress)["done"].tolist() == [500]


def test_the_example(tmp_path: Path) -> None:
    """The guide's command: who is behind, and by more than chance."""
    tables = [f"--{key}={EXAMPLES / key}.csv" for key in ("market", "profiles", "readings")]
    settings = f"--settings={EXAMPLES / 'settings.toml'}"
    first = plan(EXAMPLES / "orders.csv", *tables, settings, *WHEN, "--out", tmp_path / "plan")
    assert first.exit_code == 0
    words = ("--fills", EXAMPLES / "fills.csv", "--at", "11:00", "--json")
    orders = json.loads(run(tmp_path / "plan", *words).stdout)["orders"]
    assert orders["HB-2"]["ahead"] < 0.5 * -orders["HB-2"]["planned"]
    assert orders["HB-1"]["verdict"] == "on plan"
    assert orders["HB-1"]["ahead"] < 0.0
