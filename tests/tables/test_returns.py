"""The returns table: dates in order, histories without holes, units that can be believed."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from pandas.testing import assert_frame_equal

from scheduler.errors import InputError
from scheduler.settings import Settings
from scheduler.tables import returns
from scheduler.tables.inputs import read_inputs
from scheduler.tables.returns import common_history
from scheduler.tables.write import write_file
from tests.samples import MARKET, ORDERS, RETURNS, changed, csv_text, refused

SAMPLE = pd.DataFrame(RETURNS)


def emptied(symbol, rows):
    frame = SAMPLE.copy()
    frame.loc[list(rows), symbol] = ""
    return frame


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_a_canonical_frame_written_and_read_is_itself(tmp_path, suffix):
    """With a leading block of empty cells, too."""
    longer = pd.concat([pd.DataFrame([{"date": "2025-12-31", "QUAY": "0.01"}]), SAMPLE])
    frame = returns.read_returns(longer)
    assert list(frame.columns) == ["date", "QUAY", "MILL"]
    write_file(tmp_path / f"t{suffix}", frame)
    assert_frame_equal(returns.read_returns(tmp_path / f"t{suffix}"), frame)


def test_rows_are_put_in_the_order_of_their_dates():
    """With a note; rows keep their lines in the file for later problems."""
    checked = returns.ensure(SAMPLE.iloc[::-1].reset_index(drop=True))
    assert_frame_equal(checked.frame, returns.read_returns(SAMPLE))
    assert checked.notes == ("returns: rows put in the order of their dates",)
    assert checked.rows.tolist() == list(range(61, 1, -1))
    assert returns.ensure(SAMPLE).notes == ()


@pytest.mark.parametrize(
    ("column", "value", "rule", "remedy"),
    [
        ("date", "2026-01-01", "repeats the date of row 2", "keep one row"),
        ("date", "2026-02-30", "is no date on the calendar", "write it as in"),
        ("date", "2026-01-02T10:00", "is a time", "write the date alone"),
        ("date", "02/01/2026", "is no ISO 8601 time", "write"),
        ("date", "", "must not be empty", "ISO 8601 date"),
        ("MILL", "-1.2", "must be from -1 to 10", "a rise of 1 % is 0.01"),
        ("MILL", "12", "must be from -1 to 10", "a rise of 1 % is 0.01"),
        ("MILL", "1%", "is written as a percentage", "5% is 0.05"),
        ("MILL", "nan", "is not finite", "write a number"),
    ],
)
def test_a_bad_cell_is_named(put, column, value, rule, remedy):
    """By file, editor row, column, text, rule and remedy."""
    path = put("r.csv", csv_text(changed(RETURNS, **{column: value})))
    (problem,) = refused(returns.ensure, path)
    assert (problem.source, problem.row, problem.column) == (path, 3, column)
    assert (problem.value or "") == value
    assert rule in problem.rule
    assert remedy in problem.remedy


def test_a_history_may_begin_late_and_has_no_holes():
    """A leading block is accepted; each empty cell after the first return is refused."""
    assert returns.ensure(emptied("MILL", range(5))).frame["MILL"].isna().sum() == 5
    found = refused(returns.ensure, emptied("MILL", [0, 1, 7, 59]))
    rule = "is empty after the symbol's first return"
    assert [(p.row, p.column, p.rule) for p in found] == [(9, "MILL", rule), (61, "MILL", rule)]
    assert "leave the date out for all" in found[0].remedy


def test_leading_is_meant_in_the_order_of_dates():
    """In a file that begins with the latest date the leading block stands at its end."""
    turned = emptied("MILL", range(5)).iloc[::-1].reset_index(drop=True)
    assert returns.ensure(turned).frame["MILL"].isna().tolist() == [True] * 5 + [False] * 55
    (problem,) = refused(
        returns.ensure, emptied("MILL", [0]).iloc[[*range(1, 60), 0]].assign(date=RETURNS["date"])
    )
    assert (problem.row, problem.column) == (61, "MILL")


def test_sixty_days_are_the_fewest():
    """One fewer is refused."""
    assert len(returns.ensure(SAMPLE).frame) == 60
    (problem,) = refused(returns.ensure, SAMPLE.iloc[1:])
    assert problem.rule == "has 59 days, fewer than 60"


def test_units_are_found_out_by_the_volatility():
    """Percent in place of fractions move by more than the bound on daily_vol."""
    percent = SAMPLE.assign(MILL=np.where(np.arange(60) % 2, "0.9", "-0.9"))
    (problem,) = refused(returns.ensure, percent)
    assert (problem.column, problem.rule) == ("MILL", "moves by 0.9 a day, above 0.25")
    assert problem.remedy.startswith("percent? ")
    wide = Settings().with_values("checks", max_daily_vol=1.0)
    assert len(returns.ensure(percent, settings=wide).frame) == 60


@pytest.mark.parametrize("cell", ["", "0", "0.001"])
def test_a_symbol_whose_returns_do_not_vary_is_refused(cell):
    """An empty column, a price that stands still, or the same figure every day."""
    (problem,) = refused(returns.ensure, SAMPLE.assign(MILL=cell))
    assert (problem.column, problem.rule) == ("MILL", "has no returns that vary")


def _refused(table):
    with pytest.raises(InputError) as caught:
        read_inputs(pd.DataFrame(ORDERS), pd.DataFrame(MARKET), returns=table)
    return [(p.source, p.row, p.column, p.rule) for p in caught.value.problems]


def test_every_symbol_that_is_traded_has_enough_returns():
    """Missing and short histories are refused; those of other symbols do not matter."""
    other = SAMPLE.rename(columns={"MILL": "WEIR"})
    assert _refused(other) == [("returns", 1, "MILL", "has no column")]
    short = emptied("MILL", range(5))
    assert _refused(short) == [("returns", None, "MILL", "has only 55 returns")]
    idle = short.rename(columns={"MILL": "WEIR"}).assign(MILL=RETURNS["MILL"])
    assert read_inputs(pd.DataFrame(ORDERS), pd.DataFrame(MARKET), returns=idle)


def test_returns_vary_on_the_days_in_common():
    """A symbol that has not moved since another one was listed has no correlation with it."""
    early = pd.DataFrame({"date": [f"2025-12-{day:02d}" for day in range(1, 11)]})
    early["QUAY"] = ["0.01", "-0.01"] * 5
    frame = pd.concat([early.assign(MILL=""), SAMPLE.assign(QUAY="0")])
    rule = "has no returns that vary from 2026-01-01 on, where all symbols have returns"
    assert _refused(frame) == [("returns", None, "QUAY", rule)]


def test_the_common_history_begins_with_the_latest_listing():
    """Days before it are left out, with a note that names whose they are."""
    early = pd.DataFrame({"date": ["2025-12-30", "2025-12-31"], "QUAY": ["0.01", "0.02"]})
    checked = returns.ensure(pd.concat([early, SAMPLE]))
    sample, dates, notes = common_history(checked, ["MILL", "QUAY"])
    assert sample.shape == (60, 2)
    assert sample[:, 1].tolist() == [float(cell) for cell in RETURNS["QUAY"]]
    assert dates == RETURNS["date"]
    assert notes == ("returns: the first 2 of 62 days left out, before those of MILL",)
    whole, _, silent = common_history(checked, ["QUAY"])
    assert (whole.shape, silent) == ((62, 1), ())
