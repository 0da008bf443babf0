"""The holdings table: signed shares, checked against the market's calendars."""

from __future__ import annotations

import pandas as pd
import pytest
from pandas.testing import assert_frame_equal

from scheduler.errors import InputError
from scheduler.tables import holdings
from scheduler.tables.inputs import read_tables
from scheduler.tables.write import write_file
from tests.samples import HOLDINGS, MARKET, changed, csv_text, refused


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_a_canonical_frame_written_and_read_is_itself(tmp_path, suffix):
    """Short positions and none at all included."""
    frame = holdings.read_holdings(pd.DataFrame({"symbol": ["A", "B"], "shares": [-5, 0]}))
    assert frame["shares"].tolist() == [-5.0, 0.0]
    write_file(tmp_path / f"t{suffix}", frame)
    assert_frame_equal(holdings.read_holdings(tmp_path / f"t{suffix}"), frame)


@pytest.mark.parametrize(
    ("column", "value", "rule", "remedy"),
    [
        ("symbol", "QUAY", "repeats the symbol of row 2", "keep one row"),
        ("symbol", "", "must not be empty", "as in the market table"),
        ("shares", "", "must not be empty", "negative for a short position"),
        ("shares", "(300)", "is not a number", "decimal point"),
        ("shares", "-1e16", "must be from -1e+15 to 1e+15", "shares held"),
    ],
)
def test_a_bad_cell_is_named(put, column, value, rule, remedy):
    """By file, editor row, column, text, rule and remedy."""
    path = put("h.csv", csv_text(changed(HOLDINGS, **{column: value})))
    (problem,) = refused(holdings.ensure, path)
    assert (problem.source, problem.row, problem.column) == (path, 3, column)
    assert (problem.value or "", problem.rule) == (value, rule)
    assert remedy in problem.remedy


@pytest.mark.parametrize("shares", ["-0.5", "1.25"])
def test_fractions_of_a_share_are_held_round_the_clock_only(shares):
    """Refused on an exchange's calendar, accepted on 24/7 and without a market table."""
    table = changed(HOLDINGS, shares=shares)
    with pytest.raises(InputError) as caught:
        read_tables({"holdings": table, "market": pd.DataFrame(MARKET)})
    (problem,) = caught.value.problems
    assert (problem.row, problem.column, problem.value) == (3, "shares", shares)
    assert problem.rule == "is a fraction of a share"
    coins = changed(MARKET, calendar="24/7")
    assert read_tables({"holdings": table, "market": coins})
    assert read_tables({"holdings": table})
