"""What `headrace plan` refuses: each with place, value, rule and remedy, and nothing written."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import Result
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.cli.running import EXAMPLES, WHEN, Put, arguments, run
from tests.samples import MARKET, ORDERS, PROFILES, READINGS, changed, csv_text


@pytest.fixture
def files(put: Put) -> dict[str, str]:
    """Orders and market that fit together."""
    tables = {"orders": ORDERS, "market": MARKET}
    return {key: put(f"{key}.csv", csv_text(table)) for key, table in tables.items()}


# bad input: exit status 2

BAD_CELLS = [
    ("orders", {"order_id": "o-1"}, "order_id", "repeats the order_id of row 2", "keep one row"),
    ("orders", {"order_id": "=o"}, "order_id", "must not begin with = + - @", "rename it"),
    ("orders", {"symbol": "@MILL"}, "symbol", "must not begin with = + - @", "rename it"),
    ("orders", {"symbol": "WEIR"}, "symbol", "is not in the market table", "add a row for it"),
    ("orders", {"symbol": "QUAY"}, "symbol", "is both bought and sold", "net the orders first"),
    ("orders", {"side": "hold"}, "side", "is no side", "write buy or sell"),
    ("orders", {"quantity": "0"}, "quantity", "must be above 0", "positive number of shares"),
    ("orders", {"quantity": "-5"}, "quantity", "must be above 0", "positive number of shares"),
    ("orders", {"quantity": "7.5"}, "quantity", "is a fraction of a share", "give whole shares"),
    ("orders", {"quantity": "NaN"}, "quantity", "is not finite", "write a number"),
    ("orders", {"quantity": "inf"}, "quantity", "is not finite", "write a number"),
    ("orders", {"quantity": ""}, "quantity", "must not be empty", "fill it in"),
    ("orders", {"quantity": "1,200"}, "quantity", "has a comma in a number", "decimal point"),
    ("orders", {"quantity": "1 200"}, "quantity", "has a thousands separator", "without sep"),
    ("orders", {"max_participation": "20%"}, "max_participation", "a percentage", "5% is 0.05"),
    ("orders", {"max_participation": "1.5"}, "max_participation", "from 0 to 1", "own over total"),
    ("orders", {"start": "noon"}, "start", "is no ISO 8601 time", "write HH:MM"),
    ("orders", {"start": "11:00", "end": "10:00"}, "end", "is not after start", "later than"),
    ("orders", {"start": "17:00", "end": "18:00"}, "start", "nothing trades", "give a window"),
    ("orders", {"end": "09:00"}, "end", "time is over at the planning time", "earlier planning"),
    ("orders", {"min_slice": "900"}, "min_slice", "is more than the quantity", "smaller slice"),
    ("orders", {"must_complete": "maybe"}, "must_complete", "neither true nor", "true or false"),
    ("orders", {"price_limit": "7.4"}, "price_limit", "not modelled", "leave the cell empty"),
    ("market", {"symbol": "QUAY"}, "symbol", "repeats the symbol of row 2", "keep one row"),
    ("market", {"price": "0"}, "price", "must be above 0", "currency per share"),
    ("market", {"adv": "-1"}, "adv", "must be above 0", "shares per session"),
    ("market", {"daily_vol": "0"}, "daily_vol", "must be at least 1e-06", "volatility"),
    ("market", {"daily_vol": "0.26"}, "daily_vol", "at most 0.25", "a percent or an annual"),
    ("market", {"currency": "GBX"}, "currency", "is a minor unit", "give pounds"),
    ("market", {"currency": "DOLLAR"}, "currency", "is no ISO 4217", "such as USD"),
    ("market", {"calendar": "NYSE!"}, "calendar", "is no known exchange calendar", "XNYS"),
    ("market", {"profile": "day"}, "profile", "is no known profile", "known: flat, u-shape"),
    ("market", {"lot_size": "0"}, "lot_size", "must be above 0", "shares"),
    ("readings", {"imbalance": "5.1"}, "imbalance", "from -5 to 5", "(B - S) / (2 min(B, S))"),
    ("readings", {"time": "16:00"}, "time", "is after the planning time", "plan later"),
    ("readings", {"symbol": "WEIR"}, "symbol", "is not in the market table", "add a row"),
    ("profiles", {"kind": "lunch"}, "kind", "is no kind of trading", "continuous or auction"),
    ("profiles", {"end": "15:00"}, "end", "is not after start", "later than the start"),
]


def _refused(result: Result, out: Path) -> list[str]:
    """The lines of a refusal, after which nothing may have been written or shown as data."""
    assert result.exit_code == 2
    assert result.stdout == ""
    assert not out.exists()
    assert "Traceback" not in result.stderr
    return result.stderr.splitlines()


@pytest.mark.parametrize(("table", "cells", "column", "rule", "remedy"), BAD_CELLS)
def test_a_bad_cell_is_named_with_what_to_do(
    put: Put, tmp_path: Path, table: str, cells: dict[str, str], column: str, rule: str, remedy: str
) -> None:
    """File, row, column, value, rule, remedy; and a closing line that nothing was written."""
    tables = {"orders": ORDERS, "market": MARKET, "profiles": PROFILES, "readings": READINGS}
    kept = {key: tables[key] for key in {"orders", "market", table}}
    texts = {key: csv_text(t) for key, t in kept.items()}
    texts[table] = csv_text(changed(tables[table], **cells))
    files = {key: put(f"{key}.csv", text) for key, text in texts.items()}
    out = tmp_path / "out"
    *lines, last = _refused(run(*arguments(files), *WHEN, "--out", out), out)
    assert last.startswith("Error: ")
    assert last.endswith("nothing was written")
    line = next(line for line in lines if f"column {column}:" in line)
    assert line.startswith(f"{files[table]}, row 3, column {column}: ")
    assert rule in line
    assert remedy in line
    value = cells[column]
    assert value in line.split("got ")[-1]


@pytest.mark.parametrize(
    ("name", "content", "rule", "remedy"),
    [
        ("o.csv", "", "is empty", "give a header row"),
        ("o.csv", "order_id,symbol,side,quantity\n", "has no rows", "add a row"),
        ("o.csv", "order_id;symbol;side;quantity\n1;A;buy;5\n", "by semicolons", "commas"),
        ("o.csv", 'order_id,symbol\n"o,1\n', "is no well-formed CSV", "close every quote"),
        ("o.csv", b"order_id,symbol\n\xff\xfe,1\n", "is not UTF-8", "save it"),
        ("o.csv", "order_id,symbol,side,qty\no,A,buy,5\n", "unknown column", "known: order_id"),
        ("o.csv", "order_id,symbol,side,Quantity\no,A,buy,5\n", "unknown", "mean 'quantity'"),
        ("o.csv", "order_id,symbol,quantity\no,A,5\n", "required column is missing", "add the"),
        ("o.parquet", b"PAR1 but no more", "is no readable Parquet", "save the table as CSV"),
        ("o.xlsx", b"PK", "is neither .csv nor .parquet", "save the table as CSV"),
    ],
)
def test_a_file_that_is_no_table_is_said_to_be_none(
    put: Put,
    files: dict[str, str],
    tmp_path: Path,
    name: str,
    content: str | bytes,
    rule: str,
    remedy: str,
) -> None:
    """With what to save it as."""
    path, out = put(name, content), tmp_path / "out"
    text = "\n".join(_refused(run(path, "--market", files["market"], "--out", out), out))
    assert path in text
    assert rule in text
    assert remedy in text


def test_profiles_that_do_not_fit(put: Put, files: dict[str, str], tmp_path: Path) -> None:
    """Shares that are no shares of a session, and hours that are not the exchange's."""
    out = tmp_path / "out"
    market = put("m.csv", csv_text(changed(MARKET, profile="day")))
    for cells, rule in (
        ({"volume_share": "0.15"}, "adds up to 1.05 over profile 'day', not to 1"),
        ({"start": "16:10", "end": "17:10", "kind": "continuous"}, "outside the normal session"),
    ):
        profiles = put("p.csv", csv_text(changed(PROFILES, **cells)))
        words = (files["orders"], "--market", market, "--profiles", profiles)
        assert rule in "\n".join(_refused(run(*words, *WHEN, "--out", out), out))
    near = put("p.csv", csv_text(changed(PROFILES, variance_share="0.0", volume_share="0.102")))
    near_text = Path(near).read_text().replace('"0.98"', '"1"')
    Path(near).write_text(near_text)
    fine = run(files["orders"], "--market", market, "--profiles", near, *WHEN)
    assert fine.exit_code == 0
    assert "volume_share scaled to add up to 1 for day" in fine.stderr


def test_currencies_need_a_base(put: Put, files: dict[str, str], tmp_path: Path) -> None:
    """Two currencies without one; with one, rates."""
    out = tmp_path / "out"
    mixed = put("m.csv", csv_text(changed(MARKET, currency="EUR")))
    words = (files["orders"], "--market", mixed, *WHEN, "--out", out)
    (line, _) = _refused(run(*words), out)
    assert "the orders are in more than one currency, got 'USD, EUR'; set base_currency" in line
    base = put("s.toml", '[cost]\nbase_currency = "USD"\n')
    (line, _) = _refused(run(*words, "--settings", base), out)
    assert f"{mixed}, row 3, column fx: must not be empty for another currency" in line


@pytest.mark.parametrize(
    ("text", "rule", "remedy"),
    [
        ("[plan]\nurgencey = 1\n", "column plan.urgencey: unknown setting", "mean 'urgency'?"),
        ("[plans]\nurgency = 1\n", "column plans: unknown section", "mean 'plan'?"),
        ("[plan]\nurgency = -1\n", "urgency: must be a number from 0", "default None"),
        ("[plan]\nurgency = nan\n", "urgency: must be a number from 0", "default None"),
        ('[model]\nimpact_law = "cube"\n', "must be one of imbalance, rate-power", "'cube'"),
        ("[plan]\nbucket = 0\n", "bucket: must be a number from 0.25 to 1440", "minutes"),
        ("[plan\n", "is no well-formed TOML", "below a [section]"),
        ('[cost]\nbase_currency = "QQQ"\n', "is no ISO 4217 currency code", "such as USD"),
        ("[plan]\nurgency = 1\nrisk_budget = 9\n", "exclude each other", "give one of them"),
        ('[plan]\nfinish = "most@noon"\n', "is no fraction and time", "as in 0.9@14:30"),
    ],
)
def test_settings_that_cannot_be_used(
    put: Put, files: dict[str, str], tmp_path: Path, text: str, rule: str, remedy: str
) -> None:
    """The file, the setting, its range or the name that was meant."""
    path, out = put("s.toml", text), tmp_path / "out"
    words = (*arguments(files), *WHEN, "--settings", path, "--out", out)
    said = "\n".join(_refused(run(*words), out))
    assert rule in said
    assert remedy in said


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["--date", "2026-03-07"], "is no session of XNYS, got '2026-03-07'; the next one is"),
        (["--date", "5.3.2026"], "'5.3.2026' is no date"),
        (["--date", "1999-01-04"], "lies outside the known sessions of XNYS"),
        (["--at", "noon"], "'noon' is no ISO 8601 time"),
        (["--at", "17:00", "--date", "2026-03-05"], "the order's time is over at the planning"),
        (["--urgency", "fast"], "'fast' is not a valid float"),
        (["--urgency", "-1"], "urgency: must be a number from 0 to 1e+06, got '-1.0'"),
        (["--urgency", "nan"], "urgency: must be a number from 0 to 1e+06, got 'nan'"),
        (["--urgency", "1", "--risk-budget", "50"], "urgency and risk_budget exclude each other"),
        (["--impact-law", "cube"], "'cube' is not one of"),
        (["--solver", "simplex"], "'simplex' is not one of"),
        (["--finish", "0.9"], "finish '0.9' is no fraction and time"),
        (["--finish", "1.2@14:30"], "finish '1.2@14:30' is no fraction and time"),
        (["--finish", "nan@14:30"], "finish 'nan@14:30' is no fraction and time"),
        (["--settings", "none.toml"], "none.toml: there is no such file"),
        (["--readings", "none.csv"], "none.csv: there is no such file"),
        (["--readings", "-"], "only one table can come from standard input"),
        (["--paricipation", "0.2"], "No such option"),
    ],
)
def test_options_that_cannot_be_used(
    files: dict[str, str], tmp_path: Path, args: list[str], message: str
) -> None:
    """Exit status 2 with the value and the way out; nothing written."""
    out = tmp_path / "out"
    orders = "-" if "-" in args else files["orders"]
    text = "\n".join(
        _refused(run(orders, "--market", files["market"], *args, "--out", out, input=""), out)
    )
    assert message in " ".join(text.split())


@pytest.mark.parametrize(
    ("args", "message"),
    [
        ([], "give the market table with --market FILE"),
        (["--market", "m.csv", "--report"], "give a directory with --out"),
        (["--market", "m.csv", "--parquet", "--out", "-"], "give a directory with --out"),
        (["--market", "m.csv", "--json", "--out", "-"], "both write to standard output"),
    ],
)
def test_a_command_line_that_contradicts_itself(args: list[str], message: str) -> None:
    """Said before anything is read."""
    result = run("o.csv", *args)
    assert result.exit_code == 2
    assert message in result.stderr


def test_problems_of_all_tables_come_at_once(put: Put, tmp_path: Path) -> None:
    """On screen in one go; with --json as data, all of them."""
    files = {
        "orders": put("o.csv", csv_text(changed(ORDERS, quantity="0", side="hold"))),
        "market": put("m.csv", csv_text(changed(MARKET, price="-1"))),
        "readings": put("r.csv", csv_text(changed(READINGS, imbalance="9"))),
    }
    out = tmp_path / "out"
    lines = _refused(run(*arguments(files), *WHEN, "--out", out), out)
    assert lines[-1] == "Error: 4 problems; nothing was written"
    result = run(*arguments(files), *WHEN, "--out", out, "--json")
    report = json.loads(result.stdout)
    assert (result.exit_code, report["exit_status"], report["error"]) == (2, 2, "InputError")
    assert [(p["row"], p["column"], p["value"]) for p in report["problems"]] == [
        (3, "side", "hold"),
        (3, "quantity", "0"),
        (3, "price", "-1"),
        (3, "imbalance", "9"),
    ]
    assert not out.exists()


# readable but impossible: exit status 1


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["--max-participation", "0.001"], "order o-2: at most "),
        (["--finish", "0.99@09:45"], "order o-2: finish asks for more by 2026-03-05T09:45:00"),
        (["--risk-budget", "0.1"], "order o-2: risk_budget 0.1 bps is out of reach; the least"),
        (["--cost-budget", "-50"], "order o-2: cost_budget -50 bps is out of reach; the least"),
    ],
)
def test_what_cannot_be_done(put: Put, tmp_path: Path, args: list[str], message: str) -> None:
    """What is possible at most is said, nothing written; with --json as data."""
    orders = changed(ORDERS, max_participation="").assign(
        quantity="30000", must_complete="true", start="", end=""
    )
    files = {"orders": put("o.csv", csv_text(orders)), "market": put("m.csv", csv_text(MARKET))}
    out = tmp_path / "out"
    result = run(*arguments(files), *WHEN, *args, "--out", out)
    assert (result.exit_code, result.stdout) == (1, "")
    assert result.stderr.startswith("Error: order o-")
    assert message in result.stderr
    assert not out.exists()
    data = run(*arguments(files), *WHEN, *args, "--json")
    report = json.loads(data.stdout)
    assert (data.exit_code, report["error"], report["exit_status"]) == (1, "InfeasibleError", 1)
    assert message in report["message"]


# nothing but messages


def test_a_place_that_cannot_be_written(files: dict[str, str], tmp_path: Path) -> None:
    """A file in the place of the directory or above it, and a device: 2, and nothing changed."""
    taken = tmp_path / "taken"
    taken.write_text("mine")
    for out in (taken, taken / "below", Path("/proc/none"), Path("/dev/null")):
        result = run(*arguments(files), *WHEN, "--out", out, "--quiet")
        assert result.exit_code == 2
        assert result.stdout == ""
        assert result.stderr.startswith("Error: ")
        assert str(out) in result.stderr
    assert taken.read_text() == "mine"
    assert {path.name for path in tmp_path.iterdir()} == {"taken", "orders.csv", "market.csv"}


def test_a_directory_in_the_place_of_a_table(files: dict[str, str], tmp_path: Path) -> None:
    """Said with what it is."""
    folder = tmp_path / "o.csv"
    folder.mkdir()
    for orders, market in ((folder, files["market"]), (files["orders"], folder)):
        result = run(orders, "--market", market, *WHEN)
        assert result.exit_code == 2
        assert f"{folder}: cannot be read (Is a directory)" in result.stderr


def _mangled(data: bytes, how: str, at: int, byte: int) -> bytes:
    at %= len(data)
    if how == "cut":
        return data[:at]
    if how == "twice":
        return data[:at] + data[at // 2 :]
    return data[:at] + bytes([byte]) + data[at + (how == "replace") :]


@given(
    st.sampled_from(["orders.csv", "market.csv", "profiles.csv", "readings.csv", "settings.toml"]),
    st.sampled_from(["cut", "twice", "replace", "insert"]),
    st.integers(0, 10_000),
    st.one_of(st.sampled_from(list(b'",;\n\r\0-+.eE0129:@=[]')), st.integers(0, 255)),
)
@settings(
    max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
def test_mangled_files_end_in_a_message(
    tmp_path: Path, name: str, how: str, at: int, byte: int
) -> None:
    """Cut short, repeated, a byte changed: a plan or a refusal, never a traceback, all or none."""
    path = tmp_path / name
    path.write_bytes(_mangled((EXAMPLES / name).read_bytes(), how, at, byte))
    files = {
        n.split(".")[0]: str(path if n == name else EXAMPLES / n)
        for n in ("orders.csv", "market.csv", "profiles.csv", "readings.csv", "settings.toml")
    }
    result = run(*arguments(files), *WHEN, "--out", "-", "--quiet", "--bucket", "60")
    assert result.exit_code in (0, 1, 2)
    assert bool(result.stdout) == (result.exit_code == 0)
    assert bool(result.stderr) == (result.exit_code != 0)


def test_binary_files_end_in_a_message(put: Put, files: dict[str, str]) -> None:
    """A picture, zeros, a compressed file: not a table."""
    for content in (b"\x89PNG\r\n\x1a\n" + bytes(range(256)), bytes(1000), b"\x1f\x8b\x08\x00x"):
        result = run(put("b.csv", content), "--market", files["market"], *WHEN)
        assert result.exit_code == 2
        assert result.stderr.count("b.csv") >= 1
