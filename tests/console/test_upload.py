"""Tables given on the page: checked as files are, bounded, and each session's own."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

from scheduler.cli import main
from scheduler.console import upload
from scheduler.console.upload import safe_name
from tests.console.page import Page, console, example_files, page

ORDERS = b"""order_id,symbol,side,quantity,start,end
A,OAK,buy,-5,,
A,OAK,hold,7,,
B,ELM,sell,1e99,11:00,10:00
"""
MARKET = b"""symbol,price,adv,daily_vol,calendr
OAK,50,1000000,2,XNYS
OAK,fifty,0,0.02,XNYS
"""
SETTINGS = b"[plan]\nurgensy = 1\n"
WHEN = {"date": "2026-03-05", "at": "09:30"}


def problems_of_check(files: dict[str, tuple[str, bytes]], folder: Path) -> list[dict[str, Any]]:
    """What `headrace check --json` says of the same files."""
    words = ["check", "--json"]
    for name, (file, data) in files.items():
        (folder / file).write_bytes(data)
        words += [file] if name == "orders" else [f"--{name}", file]
    with pytest.MonkeyPatch.context() as here:
        here.chdir(folder)
        result = CliRunner().invoke(main, words)
    assert result.exit_code == 2
    found: list[dict[str, Any]] = json.JSONDecoder().raw_decode(result.stdout)[0]["problems"]
    return found


@pytest.mark.parametrize("extra", [{}, {"settings": ("s.toml", SETTINGS)}])
def test_problems_are_those_of_check(extra: dict[str, Any], tmp_path: Path) -> None:
    """The same files, rows, columns, values, rules and remedies, all at once."""
    files = {"orders": ("o.csv", ORDERS), "market": ("m.csv", MARKET), **extra}
    answer = page().upload(files)
    assert answer.status_code == 422
    found = answer.json()["problems"]
    assert len(found) >= 6 + len(extra)
    assert sorted(map(str, found)) == sorted(map(str, problems_of_check(files, tmp_path)))


def test_good_tables_take_the_place_of_the_examples() -> None:
    """The same files give the same mark as the example, so the same address shows both."""
    browser = page()
    answer = browser.upload(example_files(), **WHEN).json()
    assert answer["desk"]["title"] == "your files"
    assert answer["desk"]["mark"] == browser.ask("known")["example"]
    assert browser.plan("HB-1")["cases"]["plan"]["cost"] > 0.0


def test_a_broken_table_leaves_what_was_there() -> None:
    browser = page().example()
    before = browser.plan("HB-1")["values"]
    assert browser.upload({"orders": ("o.csv", ORDERS)}).status_code == 422
    assert browser.plan("HB-1")["values"] == before


def test_sessions_do_not_see_each_others_tables() -> None:
    server = console()
    one, two, three = (Page(server).load() for _ in range(3))
    one.example()
    files = example_files()
    name, data = files["orders"]
    files["orders"] = (name, data.replace(b"HB-", b"ZZ-").replace(b"180000", b"90000"))
    mark = two.upload(files, **WHEN).json()["desk"]["mark"]
    assert one.ask("known")["desk"]["orders"][0]["order"] == "HB-1"
    assert two.ask("known")["desk"]["orders"][0]["order"] == "ZZ-1"
    assert three.ask("known")["desk"] is None
    assert "ZZ-1" not in one.post("plan", {"order": "ZZ-2", "values": {}}).json()["message"]
    for other in (one, three):  # knowing the address is not having the tables
        refused = other.post("open", {"mark": mark})
        assert refused.status_code == 422
        assert "not shared" in refused.json()["message"]
    assert three.post("plan", {"order": None, "values": {}}).status_code == 422


def test_files_too_large_are_refused_unread(monkeypatch: pytest.MonkeyPatch) -> None:
    """By their announced size, with the sizes in the message."""
    from scheduler.console import app

    monkeypatch.setattr(app, "MOST_BYTES", 3_000)
    files = {"orders": ("o.csv", b"x" * 5_000)}
    answer = page().upload(files)
    assert answer.status_code == 413
    assert "more than the 20 MB that the page takes" in answer.json()["message"]


def test_a_question_too_large_is_refused() -> None:
    body = {"order": "x" * 70_000, "values": {}}
    assert page().post("plan", body).status_code == 413


def test_a_body_without_a_size_is_refused() -> None:
    answer = page().post("upload", content=iter([b"abc"]))
    assert answer.status_code == 413


def test_parquet_that_unfolds_without_end_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(upload, "_MOST_CELLS", 1_000)
    packed = io.BytesIO()
    pd.DataFrame({"order_id": np.zeros(5_000)}).to_parquet(packed)
    files = {"orders": ("o.parquet", packed.getvalue()), "market": ("m.csv", MARKET)}
    found = page().upload(files).json()["problems"]
    assert [p["source"] for p in found if "unfolds" in p["rule"]] == ["o.parquet"]


def test_parquet_is_read_like_csv() -> None:
    browser = page()
    files = example_files()
    packed = io.BytesIO()
    pd.read_csv(io.BytesIO(files["market"][1])).to_parquet(packed)
    files["market"] = ("m.pq", packed.getvalue())
    first = browser.upload(files, **WHEN).json()["desk"]["mark"]
    assert first == browser.ask("known")["example"]


def test_names_of_files_are_names_only() -> None:
    assert safe_name("../../etc/orders.csv") == "orders.csv"
    assert safe_name("C:\\desk\\orders.csv") == "orders.csv"
    assert safe_name("") == "unnamed"
    assert len(safe_name("x" * 500 + ".csv")) == 120
    found = page().upload({"orders": ("../o.csv", ORDERS), "market": ("m.csv", MARKET)})
    assert "o.csv" in {p["source"] for p in found.json()["problems"]}


@pytest.mark.parametrize(
    ("files", "fields", "words"),
    [
        ({}, {"date": "2026-03-05"}, "orders: is missing"),
        ({"orders": ("o.txt", b"a")}, {}, "market: is missing"),
        ({"spare": ("o.csv", b"a")}, {}, "no table is called spare"),
        ({"orders": ("o.csv", ORDERS)}, {"date": "5 March"}, "is no date"),
        ({"orders": ("o.csv", ORDERS)}, {"at": "soon"}, "at: is no ISO 8601 time"),
    ],
)
def test_incomplete_forms_are_refused(files: Any, fields: dict[str, str], words: str) -> None:
    answer = page().upload(files or {"settings": ("s.toml", b"")}, **fields)
    assert answer.status_code == 422
    assert words in answer.json()["message"]


def test_markup_in_tables_comes_back_as_text() -> None:
    """The page never takes what tables hold for HTML: answers are JSON, and charts' titles are
    escaped where plotly would read tags."""
    files = example_files()
    name, data = files["orders"]
    files["orders"] = (name, data.replace(b"HB-1", b"<img src=x>"))
    browser = page()
    browser.upload(files, **WHEN).raise_for_status()
    answer = browser.post("plan", {"number": 1, "order": "<img src=x>", "values": {}})
    assert answer.headers["content-type"] == "application/json"
    assert "<img" not in json.dumps(answer.json()["values"])
