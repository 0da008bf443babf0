"""`headrace check`: exit status, messages and streams."""

from __future__ import annotations

import json
import os
import subprocess
import sys

import pandas as pd
import pytest
from click.testing import CliRunner

from scheduler.cli import COMMANDS, main
from scheduler.cli.options import CAUTIONS
from tests.samples import (
    BARS,
    CONSTRAINTS,
    CORRIDORS,
    EXPOSURES,
    FACTOR_COVARIANCE,
    HOLDINGS,
    MARKET,
    ORDERS,
    PROFILES,
    READINGS,
    RETURNS,
    changed,
    csv_text,
)


def run(*args, **options):
    return CliRunner().invoke(main, [str(arg) for arg in args], **options)


@pytest.fixture
def files(put):
    """Paths of five tables that fit together, by table."""
    tables = {"orders": ORDERS, "profiles": PROFILES, "readings": READINGS, "bars": BARS}
    paths = {name: put(f"{name}.csv", csv_text(table)) for name, table in tables.items()}
    return paths | {"market": put("market.csv", csv_text(changed(MARKET, daily_vol="0.12")))}


def _options(files):
    return [word for name in files if name != "orders" for word in (f"--{name}", files[name])]


def test_tables_without_problems(files):
    """Tables and rows are counted on standard output, notes are on standard error."""
    result = run("check", files["orders"], *_options(files))
    assert result.exit_code == 0
    assert result.stdout == "5 tables, 10 rows: no problems\n"
    assert result.stderr.startswith("Note: ")
    assert "daily_vol above 0.1" in result.stderr


def test_quiet_says_nothing_but_errors(files):
    """No notes, no counts; problems still."""
    fine = run("check", "--quiet", files["orders"], *_options(files))
    assert (fine.exit_code, fine.output) == (0, "")
    wrong = run("check", "--quiet", files["bars"])
    assert wrong.exit_code == 2
    assert "required column is missing" in wrong.stderr


def test_json_summary(files):
    """Rows by table and the notes, as one JSON document on standard output."""
    result = run("check", "--json", files["orders"], *_options(files))
    summary = json.loads(result.stdout)
    assert summary["rows"] == dict.fromkeys(["orders", "market", "profiles", "readings", "bars"], 2)
    assert [*map(type, summary["notes"])] == [str]
    assert summary["problems"] == []


def test_tables_of_a_list(put):
    """Risk, corridors and holdings are read, and compared with orders and market."""
    tables = {
        "market": MARKET,
        "exposures": EXPOSURES,
        "factor-covariance": FACTOR_COVARIANCE,
        "returns": RETURNS,
        "corridors": CORRIDORS,
        "constraints": CONSTRAINTS,
        "holdings": HOLDINGS,
    }
    paths = {name: put(f"{name}.csv", csv_text(table)) for name, table in tables.items()}
    words = [word for name, path in paths.items() for word in (f"--{name}", path)]
    orders = put("orders.csv", csv_text(ORDERS))
    result = run("check", orders, *words)
    assert (result.exit_code, result.stdout) == (0, "8 tables, 74 rows: no problems\n")
    put("exposures.csv", csv_text({**EXPOSURES, "symbol": ["QUAY", "WEIR"]}))
    wrong = run("check", orders, *words)
    assert wrong.exit_code == 2
    assert "column symbol: lacks a symbol that is traded, got 'MILL'" in wrong.stderr


def test_problems_of_all_tables_and_settings_are_reported(put, files):
    """One run finds what is wrong with every file; exit status 2."""
    settings = put("s.toml", "[plan]\nbucket = 0\n")
    bars = put("b.csv", csv_text(changed(BARS, volume="-1")))
    orders = put("o.csv", csv_text(changed(ORDERS, symbol="WEIR")))
    result = run(
        "check", orders, "--market", files["market"], "--bars", bars, "--settings", settings
    )
    assert result.exit_code == 2
    assert result.stdout == ""
    first, second, third, last = result.stderr.splitlines()
    assert first.startswith(f"{settings}, column plan.bucket: must be a number from 0.25")
    assert second.startswith(f"{bars}, row 3, column volume: must be at least 0, got '-1'")
    assert third.startswith(f"{orders}, row 3, column symbol: is not in the market table")
    assert last == "Error: 3 problems; nothing was written"


def test_twenty_problems_are_shown_and_all_with_json(put):
    """The rest is counted on screen; --json has each with its place, value, rule and remedy."""
    text = "order_id,symbol,side,quantity\n" + "".join(f"o{n},A{n},buy,0\n" for n in range(50))
    path = put("o.csv", text)
    shown = run("check", path)
    lines = shown.stderr.splitlines()
    assert shown.exit_code == 2
    assert len(lines) == 22
    assert "row 2," in lines[0]
    assert "row 21," in lines[19]
    assert lines[20] == "... and 30 more; --json lists all of them"

    result = run("check", "--json", path)
    report = json.loads(result.stdout)
    assert result.exit_code == report["exit_status"] == 2
    assert report["error"] == "InputError"
    assert [problem["row"] for problem in report["problems"]] == list(range(2, 52))
    problem = report["problems"][0]
    assert problem["source"] == path
    assert (problem["column"], problem["value"]) == ("quantity", "0")
    assert "above 0" in problem["rule"]
    assert "positive number of shares" in problem["remedy"]


def test_columns_to_ignore(put):
    """By name, or all of them with '*'; they are listed."""
    path = put("o.csv", csv_text({**ORDERS, "desk": ["A", "B"], "memo": ["", ""]}))
    assert run("check", path).exit_code == 2
    assert run("check", path, "--ignore-columns", "desk").exit_code == 2
    for names in ("desk,memo", "*"):
        result = run("check", path, "--ignore-columns", names)
        assert result.exit_code == 0
        assert "ignored columns: desk, memo" in result.stderr


def test_standard_input(files):
    """`-` is read once; two tables cannot share it."""
    result = run("check", "-", "--market", files["market"], input=csv_text(ORDERS))
    assert result.stdout == "2 tables, 4 rows: no problems\n"
    twice = run("check", "-", "--market", "-", input=csv_text(ORDERS))
    assert twice.exit_code == 2
    assert twice.stderr.startswith("Error: only one table can come from standard input")


def test_parquet_by_suffix(tmp_path, files):
    """A typed table is checked as its text is."""
    path = tmp_path / "o.parquet"
    pd.DataFrame({**ORDERS, "quantity": [12000, -800]}).to_parquet(path)
    result = run("check", path, "--market", files["market"])
    assert result.exit_code == 2
    assert f"{path}, row 3, column quantity: must be above 0" in result.stderr


def test_nothing_to_check_is_misuse():
    """At least one table has to be named."""
    result = run("check")
    assert result.exit_code == 2
    assert "give at least one table" in result.stderr


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_help_with_the_cautions(name):
    """The group and each of its commands say what the figures are and who decides."""
    for args in ((name, "--help"), ("--help",)):
        result = run(*args)
        assert result.exit_code == 0
        assert CAUTIONS in " ".join(result.stdout.split())


def test_commands_are_listed_with_the_help_they_have():
    """The listing, made without loading a command, says what the command says."""
    group_help = " ".join(run("--help").stdout.split())
    for name, text in COMMANDS.items():
        assert f"{name} {text}" in group_help
        assert text.rstrip(".") in " ".join(run(name, "--help").stdout.split())


def test_an_unknown_command_is_misuse():
    """Exit status 2, as for every misuse."""
    assert run("chekc").exit_code == 2


def _python(*args, **options):
    command = [sys.executable, "-m", "scheduler", *map(str, args)]
    return subprocess.run(command, capture_output=True, text=True, check=False, **options)


def test_python_m_scheduler_is_the_same_program(files):
    """Exit status and streams of the real process; no traceback."""
    result = _python("check", files["orders"])
    assert (result.returncode, result.stdout) == (0, "1 table, 2 rows: no problems\n")
    missing = _python("check", "none.csv")
    assert missing.returncode == 2
    assert missing.stderr.splitlines()[0] == "none.csv: there is no such file; check the path"
    assert "Traceback" not in missing.stderr


def test_a_closed_pipe_ends_quietly(put):
    """As under `headrace check --json | head`: no traceback."""
    path = put("o.csv", csv_text(changed(ORDERS, quantity="0")))
    reader, writer = os.pipe()
    os.close(reader)
    command = [sys.executable, "-m", "scheduler", "check", "--json", path]
    with os.fdopen(writer, "w") as closed:
        result = subprocess.run(
            command, stdout=closed, stderr=subprocess.PIPE, text=True, check=False
        )
    assert result.returncode == 1
    assert result.stderr == ""
