"""`headrace plan`: files, streams and messages; the command line against the settings file."""

from __future__ import annotations

import io
import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from tests.cli.running import EXAMPLES, WHEN, Put, arguments, run
from tests.samples import MARKET, ORDERS, changed, csv_text


@pytest.fixture
def files(put: Put) -> dict[str, str]:
    """Orders and market that fit together."""
    tables = {"orders": ORDERS, "market": MARKET}
    return {key: put(f"{key}.csv", csv_text(table)) for key, table in tables.items()}


# what it writes and says


def test_files_text_and_streams(files: dict[str, str], tmp_path: Path) -> None:
    """Schedule and summary in the directory, text on stdout, notes and progress on stderr."""
    out = tmp_path / "out"
    result = run(*arguments(files), *WHEN, "--out", out)
    assert result.exit_code == 0
    assert {path.name for path in out.iterdir()} == {"schedule.csv", "summary.json"}
    schedule = pd.read_csv(out / "schedule.csv")
    assert schedule.groupby("order_id")["shares"].sum().to_dict() == {"o-1": 12_000, "o-2": 800}
    summary = json.loads((out / "summary.json").read_text())
    assert (summary["date"], summary["inputs"]["orders"]) == ("2026-03-05", files["orders"])
    assert "o-1: buy 12,000 QUAY" in result.stdout
    assert "2 orders" in result.stdout
    said = [f"Note: {note}" for note in summary["notes"]]
    assert result.stderr.splitlines() == [*said, f"Written to {out}"]


def test_without_out_the_plan_is_shown_and_not_written(
    files: dict[str, str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = set(tmp_path.iterdir())
    monkeypatch.chdir(tmp_path)
    result = run(*arguments(files), *WHEN)
    assert result.exit_code == 0
    assert "optimum proven" in result.stdout
    assert set(tmp_path.iterdir()) == before


def test_parquet(files: dict[str, str], tmp_path: Path) -> None:
    """The schedule typed, in place of the CSV."""
    run(*arguments(files), *WHEN, "--out", tmp_path / "out", "--parquet")
    assert {p.name for p in (tmp_path / "out").iterdir()} == {"schedule.parquet", "summary.json"}
    assert pd.read_parquet(tmp_path / "out" / "schedule.parquet")["shares"].sum() == 12_800


def test_json_is_the_summary_alone(files: dict[str, str], tmp_path: Path) -> None:
    """One document on stdout, the same as the file's but for the seconds it took."""
    out = tmp_path / "out"
    result = run(*arguments(files), *WHEN, "--json", "--out", out)
    assert json.loads(result.stdout) == json.loads((out / "summary.json").read_text())


def test_out_dash_is_csv_alone_on_stdout(files: dict[str, str]) -> None:
    """As the file would be; notes stay on stderr."""
    result = run(*arguments(files), *WHEN, "--out", "-")
    frame = pd.read_csv(io.StringIO(result.stdout))
    assert frame["shares"].sum() == 12_800
    assert "Note: " in result.stderr


def test_quiet(files: dict[str, str], tmp_path: Path) -> None:
    """Nothing but errors; files and data on stdout all the same."""
    quiet = run(*arguments(files), *WHEN, "--quiet", "--out", tmp_path / "out")
    assert (quiet.exit_code, quiet.output) == (0, "")
    assert (tmp_path / "out" / "summary.json").exists()
    piped = run(*arguments(files), *WHEN, "--quiet", "--out", "-")
    assert piped.stderr == ""
    assert piped.stdout.startswith("order_id,symbol,side,bucket")
    wrong = run(files["orders"], "--market", "none.csv", "--quiet")
    assert "none.csv: there is no such file" in wrong.stderr


def test_orders_from_standard_input(files: dict[str, str]) -> None:
    """`-` is read as CSV; problems are told as of standard input."""
    piped = run("-", "--market", files["market"], *WHEN, "--out", "-", input=csv_text(ORDERS))
    named = run(*arguments(files), *WHEN, "--out", "-")
    assert piped.exit_code == 0
    assert piped.stdout == named.stdout
    text = csv_text(changed(ORDERS, quantity="none"))
    wrong = run("-", "--market", files["market"], *WHEN, input=text)
    assert wrong.exit_code == 2
    assert wrong.stderr.startswith("standard input, row 3, column quantity: is not a number")


def test_text_is_never_cut_when_piped(put: Put) -> None:
    """However narrow the terminal is said to be: every id and every number in full."""
    name = "a-name-that-no-desk-would-ever-give-to-one-of-its-orders-but-may"
    orders = {"order_id": [name], "symbol": ["QUAY"], "side": ["buy"], "quantity": ["123456789"]}
    market = changed(MARKET).iloc[:1].assign(adv="9000000000")
    words = arguments(
        {"orders": put("o.csv", csv_text(orders)), "market": put("m.csv", csv_text(market))}
    )
    result = run(*words, *WHEN, env={"COLUMNS": "20", "TERM": "dumb"})
    assert f"{name}: buy 123,456,789 QUAY" in result.stdout
    shares = pd.read_csv(io.StringIO(run(*words, *WHEN, "--out", "-").stdout))["shares"]
    words = result.stdout.split()
    assert all(f"{count:,}" in words for count in shares)
    assert "…" not in result.stdout


def test_orders_of_one_symbol_have_one_risk(put: Put) -> None:
    """Known without a risk table, so it is shown, not bounds of it."""
    orders = "order_id,symbol,side,quantity\na,QUAY,buy,12000\nb,QUAY,buy,800\n"
    market = "symbol,price,adv,daily_vol,calendar\nQUAY,100,1000000,0.02,XNYS\n"
    files = {"orders": put("orders.csv", orders), "market": put("market.csv", market)}
    text = run(*arguments(files), *WHEN).stdout
    assert "2 orders, 1,280,000: expected cost" in text
    assert "if they move as one" not in text


def test_many_orders_have_a_line_each(put: Put) -> None:
    """Slices are shown of up to five orders, beyond that one line an order and the total."""
    count = 7
    orders = pd.DataFrame(
        {"order_id": [f"o{i}" for i in range(count)], "symbol": [f"S{i}" for i in range(count)]}
    ).assign(side="buy", quantity=5_000)
    market = pd.DataFrame({"symbol": orders["symbol"], "price": 20, "adv": 1e6, "daily_vol": 0.02})
    tables = {"orders": csv_text(orders), "market": csv_text(market.assign(calendar="XNYS"))}
    files = {key: put(f"{key}.csv", text) for key, text in tables.items()}
    lines = run(*arguments(files), *WHEN).stdout.splitlines()
    assert lines[0].startswith("Session 2026-")
    assert [line.split()[0] for line in lines[2:10]] == ["order", *orders["order_id"]]
    assert lines[-1].startswith("7 orders, 700,000: expected cost")


# settings and the command line


def _summary(*args: object) -> dict[str, Any]:
    result = run(*args, *WHEN, "--json", "--quiet")
    assert result.exit_code == 0, result.stderr
    summary: dict[str, Any] = json.loads(result.stdout)
    return summary


@pytest.mark.parametrize(
    ("option", "section", "value"),
    [
        ("--urgency", "plan", 0.7),
        ("--risk-aversion", "plan", 1e-6),
        ("--bucket", "plan", 30.0),
        ("--max-participation", "plan", 0.4),
        ("--max-auction-participation", "plan", 0.05),
        ("--feedback", "model", 0.5),
        ("--relaxation", "model", 0.08),
        ("--impact-law", "model", "root-lasting"),
    ],
)
def test_the_command_line_wins_over_the_settings_file(
    files: dict[str, str], put: Put, option: str, section: str, value: float | str
) -> None:
    """Each option is a setting; what is not given stays as in the file."""
    path = put(
        "s.toml",
        "[plan]\nurgency = 0.5\nbucket = 60\nmax_participation = 0.2\n"
        "max_auction_participation = 0.2\n[model]\nfeedback = 2\nrelaxation = 0.1\n"
        'impact_law = "rate-power"\n',
    )
    name = option.removeprefix("--").replace("-", "_")
    plain = _summary(*arguments(files), "--settings", path)["settings"]
    told = _summary(*arguments(files), "--settings", path, option, value)["settings"]
    assert told[section][name] == value
    expected = {key: dict(values) for key, values in plain.items()}
    expected[section][name] = value
    if option == "--risk-aversion":  # an aim takes the place of the file's
        del expected["plan"]["urgency"]
    assert told == expected


@pytest.mark.parametrize("aim", ["risk_aversion = 1e-6", "risk_budget = 90", "cost_budget = 30"])
def test_an_aim_of_the_command_line_replaces_that_of_the_file(
    files: dict[str, str], put: Put, aim: str
) -> None:
    """The plan is that of the urgency alone."""
    path = put("s.toml", f"[plan]\n{aim}\n")
    told = _summary(*arguments(files), "--settings", path, "--urgency", "0.3")
    assert told["orders"] != _summary(*arguments(files), "--settings", path)["orders"]
    assert told["settings"]["plan"]["urgency"] == 0.3
    assert aim.split(maxsplit=1)[0] not in told["settings"]["plan"]


def test_finish_of_the_command_line_replaces_that_of_the_file(
    files: dict[str, str], put: Put
) -> None:
    """It may be repeated, and buckets are cut at its times."""
    path = put("s.toml", '[plan]\nfinish = "0.9@11:00"\nurgency = 0\n')
    words = (*arguments(files), *WHEN, "--settings", path, "--out", "-", "--quiet")
    by_file = pd.read_csv(io.StringIO(run(*words).stdout))
    asked = ("--finish", "0.2@12:07", "--finish", "0.9@14:08")
    by_line = pd.read_csv(io.StringIO(run(*words, *asked).stdout))
    for frame, time, least in (
        (by_file, "11:00", 0.9),
        (by_line, "12:07", 0.2),
        (by_line, "14:08", 0.9),
    ):
        at = frame[frame["end"] == f"2026-03-05T{time}:00-05:00"]
        assert at["cumulative"].tolist()[0] >= least * 12_000 - 1
        assert at["cumulative"].tolist()[1] >= least * 800 - 1
    assert "2026-03-05T12:07:00-05:00" not in set(by_file["end"])


def test_the_conic_solver_gives_the_same_plan(files: dict[str, str]) -> None:
    """The same problem through a general solver, to a few shares."""
    words = (*arguments(files), *WHEN, "--out", "-", "--quiet", "--bucket", "60")
    one, other = (
        pd.read_csv(io.StringIO(run(*words, "--solver", solver).stdout))
        for solver in ("interior", "conic")
    )
    assert (one["shares"] - other["shares"]).abs().max() <= 12


def test_ignored_columns_are_listed(files: dict[str, str], put: Put) -> None:
    """In the notes and so in the summary."""
    orders = put("desk.csv", csv_text({**ORDERS, "desk": ["A", "B"]}))
    told = _summary(orders, "--market", files["market"], "--ignore-columns", "desk")
    assert f"{orders}: ignored columns: desk" in told["notes"]


# the real process


def _process(*args: object, **options: Any) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "scheduler", "plan", *map(str, args)]
    return subprocess.run(command, capture_output=True, text=True, check=False, **options)


def test_python_m_scheduler_plans_the_example(tmp_path: Path) -> None:
    """Without a warning on stderr; the files add up."""
    tables = [
        word
        for key in ("market", "profiles", "readings")
        for word in (f"--{key}", EXAMPLES / f"{key}.csv")
    ]
    out = tmp_path / "out"
    chosen = ("--settings", EXAMPLES / "settings.toml", *WHEN, "--out", out)
    result = _process(EXAMPLES / "orders.csv", *tables, *chosen)
    assert result.returncode == 0
    lines = result.stderr.splitlines()
    assert lines[-1] == f"Written to {out}"
    assert all(line.startswith("Note: HB-") for line in lines[:-1])
    summary = json.loads((out / "summary.json").read_text())
    schedule = pd.read_csv(out / "schedule.csv")
    for order, shares in schedule.groupby("order_id")["shares"].sum().items():
        figures = summary["orders"][order]
        assert shares + figures["residual"] == figures["quantity"]


def test_exit_status_of_the_real_process(files: dict[str, str]) -> None:
    """1 for what is impossible, with a message and no traceback."""
    tight = _process(*arguments(files), *WHEN, "--finish", "0.999@09:45")
    assert (tight.returncode, tight.stdout) == (1, "")
    assert tight.stderr.startswith("Error: order o-")
    assert "Traceback" not in tight.stderr
