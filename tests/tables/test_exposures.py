"""The exposures table: columns that the user names, and what is refused in them."""

from __future__ import annotations

import pandas as pd
import pytest
from pandas.testing import assert_frame_equal

from scheduler.errors import InputError, MisuseError
from scheduler.tables import exposures
from scheduler.tables.exposures import exposure_matrix, factor_names
from scheduler.tables.inputs import read_inputs, read_tables
from scheduler.tables.write import write_file
from tests.samples import (
    EXPOSURES,
    FACTOR_COVARIANCE,
    MARKET,
    ORDERS,
    RETURNS,
    changed,
    csv_text,
    refused,
)


def _refused(**tables):
    with pytest.raises(InputError) as caught:
        read_tables({name: pd.DataFrame(table) for name, table in tables.items()})
    return [(p.source, p.row, p.column, p.value, p.rule) for p in caught.value.problems]


def test_every_further_column_is_a_factor():
    """Names and order are those of the source; cells are numbers."""
    checked = exposures.ensure(pd.DataFrame(EXPOSURES))
    assert factor_names(checked) == ["market", "size"]
    assert checked.frame["size"].tolist() == [-0.4, 1.5]
    assert checked.notes == ()


def test_rows_and_columns_come_in_any_order_asked_for():
    """Symbols and factors are looked up by name; a symbol without a row is NaN."""
    checked = exposures.ensure(pd.DataFrame(EXPOSURES))
    matrix = exposure_matrix(checked, ["MILL", "WEIR", "QUAY"], ["size", "market"])
    assert matrix[[0, 2]].tolist() == [[1.5, 0.7], [-0.4, 1.1]]
    assert pd.isna(matrix[1]).all()


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_a_canonical_frame_written_and_read_is_itself(tmp_path, suffix):
    """In memory and through both kinds of file."""
    frame = exposures.read_exposures(pd.DataFrame(EXPOSURES))
    write_file(tmp_path / f"t{suffix}", frame)
    assert_frame_equal(exposures.read_exposures(tmp_path / f"t{suffix}"), frame)


@pytest.mark.parametrize(
    ("column", "value", "rule", "remedy"),
    [
        ("size", "", "must not be empty", "fraction of price per unit of the factor"),
        ("size", "big", "is not a number", "decimal point"),
        ("size", "1,5", "has a comma in a number", "decimal point"),
        ("size", "inf", "is not finite", "write a number"),
        ("size", "1e10", "must be from -1e+09 to 1e+09", "exposure"),
        ("symbol", "QUAY", "repeats the symbol of row 2", "keep one row"),
    ],
)
def test_a_bad_cell_is_named(put, column, value, rule, remedy):
    """File, editor row, column, text, rule and remedy, whatever the column is called."""
    path = put("e.csv", csv_text(changed(EXPOSURES, **{column: value})))
    (problem,) = refused(exposures.ensure, path)
    assert (problem.source, problem.row, problem.column) == (path, 3, column)
    assert (problem.value or "", problem.rule) == (value, rule)
    assert remedy in problem.remedy


@pytest.mark.parametrize(
    ("name", "rule"),
    [
        ("=cmd", "the name of the column must not begin with = + - @, tab or return"),
        ("a\x1bb", "the name of the column holds a control or invisible character"),
    ],
)
def test_the_name_of_a_factor_follows_the_rules_of_ids(name, rule):
    """A name goes into files and pages like any id."""
    found = refused(exposures.ensure, pd.DataFrame({**EXPOSURES, name: ["1", "2"]}))
    assert [(p.row, p.rule) for p in found] == [(1, rule)]
    assert found[0].column.isprintable()


def test_without_a_factor_there_is_no_table():
    """At least one column beside the symbols."""
    (problem,) = refused(exposures.ensure, pd.DataFrame({"symbol": ["QUAY"]}))
    assert (problem.row, problem.rule) == (1, "has no column for (each factor)")
    assert "add a column" in problem.remedy


def test_a_slip_of_the_symbol_column_is_no_factor():
    """A near miss of a required name is named as such, not taken for a factor."""
    frame = pd.DataFrame(EXPOSURES).rename(columns={"symbol": "Symbols"})
    unknown, missing = refused(exposures.ensure, frame, ignore_columns="*")
    assert (unknown.column, unknown.rule) == ("Symbols", "unknown column")
    assert "did you mean 'symbol'?" in unknown.remedy
    assert (missing.column, missing.rule) == ("symbol", "required column is missing")


def test_columns_are_passed_over_by_name_only():
    """'*' stands for unknown columns, and none is unknown here."""
    frame = pd.DataFrame({**EXPOSURES, "desk": ["A", "B"]})
    checked = exposures.ensure(frame, ignore_columns="desk")
    assert factor_names(checked) == ["market", "size"]
    assert checked.notes == ("exposures: ignored columns: desk",)
    assert {p.column for p in refused(exposures.ensure, frame, ignore_columns="*")} == {"desk"}


def test_all_symbols_that_are_traded_have_exposures():
    """Those without are named; symbols that are not traded need none."""
    one = {"symbol": ["QUAY"], "market": ["1"], "size": ["0"]}
    rule = "lacks a symbol that is traded"
    found = _refused(orders=ORDERS, market=MARKET, exposures=one)
    assert found == [("exposures", None, "symbol", "MILL", rule)]
    quay = {name: values[:1] for name, values in ORDERS.items()}
    tables = {"orders": quay, "market": MARKET, "exposures": one}
    assert read_tables({name: pd.DataFrame(table) for name, table in tables.items()})


def test_both_tables_have_the_same_factors():
    """A factor that one of them lacks is named, where it stands."""
    other = {"symbol": ["QUAY", "MILL"], "market": ["1.1", "0.7"], "value": ["0.2", "0"]}
    assert _refused(exposures=other, factor_covariance=FACTOR_COVARIANCE) == [
        (
            "exposures",
            1,
            "value",
            None,
            "is no factor of the factor_covariance table factor_covariance",
        ),
        (
            "factor_covariance",
            3,
            "factor",
            "size",
            "has no column in the exposures table exposures",
        ),
    ]


def test_factors_that_claim_too_much_are_found_with_everything_else():
    """An annual covariance is found out by the market table's volatilities."""
    annual = pd.DataFrame(FACTOR_COVARIANCE)
    annual[["market", "size"]] = annual[["market", "size"]].astype(float) * 252
    found = _refused(orders=ORDERS, market=MARKET, exposures=EXPOSURES, factor_covariance=annual)
    assert [(row, value) for _, row, _, value, _ in found] == [(2, "QUAY"), (3, "MILL")]
    assert found[0][-1] == "factors claim 18.3 % a day, the market table says 1.8 %"


def test_the_risk_tables_are_one_kind_or_the_other():
    """Exposures and factor_covariance together, or returns."""
    orders, market = pd.DataFrame(ORDERS), pd.DataFrame(MARKET)
    factors = {
        "exposures": pd.DataFrame(EXPOSURES),
        "factor_covariance": pd.DataFrame(FACTOR_COVARIANCE),
    }
    inputs = read_inputs(orders, market, **factors)
    assert inputs.exposures is not None
    assert inputs.factor_covariance is not None
    assert inputs.returns is inputs.corridors is None
    for name, table in factors.items():
        with pytest.raises(MisuseError, match="belong together; give both"):
            read_inputs(orders, market, **{name: table})
    with pytest.raises(MisuseError, match="not both"):
        read_inputs(orders, market, **factors, returns=pd.DataFrame(RETURNS))
    returns = pd.DataFrame(RETURNS)
    assert read_inputs(orders, market, returns=returns).returns is not None
