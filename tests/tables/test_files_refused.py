"""Files that are no table, or not the table asked for, are refused with what to do."""

from __future__ import annotations

import io
import sys

import pandas as pd
import pytest

from scheduler.errors import InputError, MisuseError
from scheduler.tables import market, orders
from scheduler.tables.settings_file import read_settings
from tests.samples import MARKET, ORDERS, changed, csv_text, refused


@pytest.mark.parametrize(
    ("name", "content", "row", "rule", "remedy"),
    [
        ("t.csv", b"", None, "is empty", "header row"),
        ("t.csv", b"\n\n", None, "is empty", "header row"),
        ("t.xlsx", b"PK", None, "neither .csv nor .parquet", "save the table as CSV"),
        ("t.parquet", b"PAR1 no", None, "no readable Parquet", "write the file again"),
        ("t.csv", "symbol\nZÜRI\n".encode("latin-1"), 2, "is not UTF-8", "CSV in UTF-8"),
        ("t.csv", "symbol\nZÜRI\n".encode("utf-16"), 1, "is not UTF-8", "CSV in UTF-8"),
        ("t.csv", b"symbol\nA\nB\0\n", 3, "is not UTF-8", "CSV in UTF-8"),
        ("t.csv", b"symbol;price;adv\nA;1;2\n", 1, "cells by semicolons", "commas"),
        ("t.csv", b"symbol\tprice\nA\t1\n", 1, "cells by tabs", "commas"),
        ("t.csv", b'symbol,price\nA,1\n"B,1\nC,1\n', 3, "no well-formed CSV", "close every quote"),
        ("t.csv", b'symbol,price\nA"x,1\n"B"y,1\n', 3, "no well-formed CSV", "close every quote"),
    ],
)
def test_a_file_that_is_no_table(put, name, content, row, rule, remedy):
    """One problem, of the file as a whole or of the line where reading stopped."""
    path = put(name, content)
    (problem,) = refused(market.ensure, path)
    assert (problem.source, problem.row) == (path, row)
    assert rule in problem.rule
    assert remedy in problem.remedy


def test_a_file_that_cannot_be_read(tmp_path):
    """Missing files and directories are problems like any other."""
    (missing,) = refused(market.ensure, tmp_path / "none.csv")
    assert missing.rule == "there is no such file"
    (tmp_path / "d.csv").mkdir()
    (directory,) = refused(market.ensure, tmp_path / "d.csv")
    assert "cannot be read" in directory.rule


def test_a_header_alone_has_no_rows(put):
    """A table without rows is refused, and nothing else is said about it."""
    (problem,) = refused(orders.ensure, put("t.csv", ",".join(orders.TABLE.header) + "\n"))
    assert problem.rule == "has no rows"


def test_rows_of_another_length_are_named_and_the_others_still_checked(put):
    """A decimal comma or a missing cell shifts a row: named by line, beside other problems."""
    text = "symbol,price,adv,daily_vol\nA,1,5,100,0.02\n\nB,1,100\nC,0,100,0.02\n"
    long, short, zero = refused(market.ensure, put("t.csv", text))
    assert (long.row, long.value) == (2, "A,1,5,100,0.02")
    assert long.rule == "has 5 cells where the header has 4"
    assert "decimal point" in long.remedy
    assert (short.row, short.rule) == (4, "has 3 cells where the header has 4")
    assert (zero.row, zero.column) == (5, "price")


def test_rows_are_counted_in_lines_of_the_file(put):
    """A quoted line break or a blank line does not shift the row number of what follows."""
    text = 'symbol,price,adv,daily_vol,group\nA,1,9,0.02,"a\nb"\n\nB,0,9,0.02,\n'
    broken, zero = refused(market.ensure, put("t.csv", text))
    assert (broken.row, broken.column) == (2, "group")
    assert (zero.row, zero.column) == (5, "price")


def test_a_name_given_twice_or_not_at_all(put):
    """Two columns of one name, and a column without one, are problems of the header."""
    text = csv_text(MARKET).replace('"spread_bps"', "price").replace('"currency"', "")
    found = refused(market.ensure, put("t.csv", text))
    assert [(p.row, p.column, p.rule) for p in found] == [
        (1, None, "column 5 has no name"),
        (1, "price", "names a column that is there already"),
    ]


@pytest.mark.parametrize(
    ("name", "near"),
    [
        ("max_particpation", "max_participation"),
        ("Arrival Price", "arrival_price"),
        ("LOT_SIZE", "lot_size"),
        ("must_completed", "must_complete"),
    ],
)
def test_a_slip_of_a_known_name_is_never_passed_over(name, near):
    """Even '*' does not ignore what looks like a known column; its own name does."""
    frame = pd.DataFrame({k: v for k, v in ORDERS.items() if k != near})
    frame[name] = "1"
    (problem,) = refused(orders.ensure, frame, ignore_columns=("*",))
    assert (problem.row, problem.column, problem.rule) == (1, name, "unknown column")
    assert f"did you mean {near!r}?" in problem.remedy
    assert orders.ensure(frame, ignore_columns=(name,)).notes == (
        f"orders: ignored columns: {name}",
    )


@pytest.mark.parametrize("names", [("desk", "memo"), "desk,memo", ("*",), "*"])
def test_unknown_columns_are_passed_over_when_named(names):
    """Unknown columns are refused, or ignored by name with a note."""
    frame = changed(ORDERS).assign(desk="A", memo="=1")
    found = refused(orders.ensure, frame)
    assert [(p.row, p.column) for p in found] == [(1, "desk"), (1, "memo")]
    assert "known: order_id, symbol, side" in found[0].remedy
    assert "price_limit" not in found[0].remedy
    checked = orders.ensure(frame, ignore_columns=names)
    assert checked.notes == ("orders: ignored columns: desk, memo",)
    assert list(checked.frame.columns) == orders.TABLE.header


def test_what_is_no_source_is_misuse():
    """A list of rows is neither path nor frame."""
    with pytest.raises(MisuseError, match="orders must be a path, '-' or a pandas DataFrame"):
        orders.ensure([1, 2])


def test_standard_input_is_named_as_such(monkeypatch):
    """`-` reads CSV from standard input."""
    text = csv_text(changed(ORDERS, quantity="0")).encode()
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(text)))
    (problem,) = refused(orders.ensure, "-")
    assert (problem.source, problem.row) == ("standard input", 3)


@pytest.mark.parametrize(
    ("text", "row", "column", "rule", "remedy"),
    [
        ("[model]\nlevel_rate = \n", 2, None, "no well-formed TOML", "name = value"),
        ("[model]\nlevel_rat = 1\n", None, "model.level_rat", "unknown setting", "'level_rate'"),
        ("[modle]\nlevel_rate = 1\n", None, "modle", "unknown section", "'model'"),
        ("urgency = 1\n", None, "urgency", "unknown section", "known: model"),
        ("[plan]\nbucket = 0\n", None, "plan.bucket", "from 0.25 to 1440", "default 15.0"),
        ("[plan]\nbucket = nan\n", None, "plan.bucket", "from 0.25 to 1440", "minutes"),
        ("[plan]\nbucket = true\n", None, "plan.bucket", "from 0.25 to 1440", "minutes"),
        ("[model]\nimpact_law = 'no'\n", None, "model.impact_law", "must be one of", "default"),
        ("[cost]\nbase_currency = 1\n", None, "cost.base_currency", "must be text", "ISO 4217"),
        (b"# caf\xe9\n", 1, None, "is not UTF-8", "save it in UTF-8"),
    ],
)
def test_a_settings_file_that_cannot_be_used(put, text, row, column, rule, remedy):
    """Named by file, line or setting."""
    path = put("s.toml", text)
    (problem,) = refused(read_settings, path)
    assert (problem.source, problem.row, problem.column) == (path, row, column)
    assert rule in problem.rule
    assert remedy in problem.remedy


def test_all_problems_of_a_settings_file_come_at_once(put, tmp_path):
    """Several unknown or unusable settings are one error; so is a file that is not there."""
    path = put("s.toml", "[plan]\nbucket = 0\nburst = 1\n[checks]\nmax_daily_vol = -1\n")
    assert [p.column for p in refused(read_settings, path)] == [
        "plan.burst",
        "plan.bucket",
        "checks.max_daily_vol",
    ]
    with pytest.raises(InputError, match="there is no such file"):
        read_settings(tmp_path / "none.toml")


def test_settings_files_with_mark_and_foreign_line_ends_are_read(put):
    """A byte-order mark and CR LF do not matter; what is not said keeps its default."""
    path = put("s.toml", b"\xef\xbb\xbf[plan]\r\nbucket = 5\r\n")
    settings = read_settings(path)
    assert settings.plan.bucket == 5
    assert settings.plan.max_participation == 0.25
