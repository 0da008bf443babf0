"""The corridors table: kinds, amounts and percentages, and corridors that cannot be kept."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from pandas.testing import assert_frame_equal

from scheduler.errors import InputError
from scheduler.tables import corridors
from scheduler.tables.corridors import limits
from scheduler.tables.inputs import read_inputs, read_tables
from scheduler.tables.write import write_file
from tests.samples import (
    CORRIDORS,
    EXPOSURES,
    FACTOR_COVARIANCE,
    MARKET,
    ORDERS,
    changed,
    csv_text,
    refused,
)

FACTORS = {"exposures": EXPOSURES, "factor_covariance": FACTOR_COVARIANCE}


def row(**cells):
    """A table of one corridor."""
    return pd.DataFrame([{"kind": "cash", "lower": "", "upper": ""} | cells])


def test_cells_become_canonical_text():
    """Kinds in any case, numbers in their shortest digits, moments written one way."""
    frame = corridors.ensure(
        pd.DataFrame(
            {
                "kind": [" Cash", "FACTOR: size", "group:Mills & Locks"],
                "lower": ["-1e6", "-2.50 %", ""],
                "upper": ["1000000.0", "2.5%", "0"],
                "from": ["9:45", "", ""],
            }
        )
    ).frame
    assert frame["kind"].tolist() == ["cash", "factor:size", "group:Mills & Locks"]
    assert frame["lower"].tolist() == ["-1000000", "-2.5%", None]
    assert frame["upper"].tolist() == ["1000000", "2.5%", "0"]
    assert frame["from"].tolist() == ["09:45:00", None, None]
    assert frame["to"].tolist() == [None, None, None]
    assert_frame_equal(corridors.ensure(frame).frame, frame)


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_a_canonical_frame_written_and_read_is_itself(tmp_path, suffix):
    """Through both kinds of file."""
    frame = corridors.read_corridors(pd.DataFrame(CORRIDORS))
    write_file(tmp_path / f"t{suffix}", frame)
    assert_frame_equal(corridors.read_corridors(tmp_path / f"t{suffix}"), frame)


def test_limits_are_money():
    """Percent are of the notional given; an empty side is infinite."""
    found = limits(corridors.read_corridors(pd.DataFrame(CORRIDORS)), 2e6)
    assert found.measure == ("cash", "factor")
    assert found.name == ("", "market")
    assert found.lower.tolist() == [-1e5, -np.inf]
    assert found.upper.tolist() == [1e5, 2e4]


def test_a_name_may_hold_a_colon():
    """Only the first one ends the kind."""
    frame = corridors.read_corridors(row(kind="group:a:b", upper="0"))
    assert limits(frame, 1.0).name == ("a:b",)


@pytest.mark.parametrize(
    ("column", "value", "rule", "remedy"),
    [
        ("kind", "", "must not be empty", "factor:NAME"),
        ("kind", "turnover", "is no kind of corridor", "write cash, gross, net"),
        ("kind", "factor", "is no kind of corridor", "factor:NAME"),
        ("kind", "group: ", "is no kind of corridor", "group:NAME"),
        ("kind", "cash:USD", "is no kind of corridor", "write cash"),
        ("kind", "factor:=1", "must not begin with", "rename"),
        ("upper", "many", "is not a number", "decimal point"),
        ("upper", "1,000", "has a comma in a number", "without thousands separators"),
        ("upper", "5 000%", "has a thousands separator", "without separators"),
        ("upper", "%", "is not a number", "decimal point"),
        ("upper", "inf", "is not finite", "write a number"),
        ("upper", "1e19", "is too large for an amount", "check it"),
        ("from", "soon", "is no ISO 8601 time", "write HH:MM"),
        ("to", "10:00", "is not after from", "later than from"),
    ],
)
def test_a_bad_cell_is_named(put, column, value, rule, remedy):
    """By file, editor row, column, text, rule and remedy."""
    path = put("c.csv", csv_text(changed(CORRIDORS, **{column: value})))
    (problem,) = refused(corridors.ensure, path)
    assert (problem.source, problem.row, problem.column) == (path, 3, column)
    assert (problem.value or "") == value
    assert rule in problem.rule
    assert remedy in problem.remedy


@pytest.mark.parametrize("given", [{}, {"lower": ""}, {"lower": "", "upper": ""}])
def test_a_corridor_without_sides_is_refused(given):
    """Empty cells, or columns that are not there."""
    (problem,) = refused(corridors.ensure, pd.DataFrame([{"kind": "net"} | given]))
    assert (problem.row, problem.rule) == (2, "has no limit on either side")


def test_a_flawed_side_is_not_called_an_empty_one():
    """One problem for one cell."""
    (problem,) = refused(corridors.ensure, row(upper="x"))
    assert problem.rule == "is not a number"


@pytest.mark.parametrize(("lower", "upper"), [("1", "0"), ("5%", "4.9%"), ("-1%", "-2%")])
def test_lower_above_upper_is_refused(lower, upper):
    """Amounts and percentages each among themselves."""
    (problem,) = refused(corridors.ensure, row(lower=lower, upper=upper))
    assert (problem.column, problem.value) == ("lower", lower)
    assert problem.rule == f"is above upper, {upper}"
    assert corridors.ensure(row(lower=upper, upper=upper)).notes == ()


def test_gross_is_never_negative():
    """An upper limit below 0 cannot be kept; on net it can."""
    (problem,) = refused(corridors.ensure, row(kind="gross", upper="-1"))
    assert problem.rule == "is below 0, though gross cannot be"
    assert len(corridors.ensure(row(kind="net", upper="-1")).frame) == 1
    assert len(corridors.ensure(row(kind="gross", upper="-0")).frame) == 1


def test_one_corridor_a_kind_and_window():
    """The same kind again is fine at another time of day."""
    both = pd.concat([row(upper="5%"), row(upper="4%")], ignore_index=True)
    (problem,) = refused(corridors.ensure, both)
    assert problem.rule == "repeats the kind and from and to of row 2"
    later = both.assign(**{"from": ["", "14:00"]})
    assert len(corridors.ensure(later).frame) == 2


def _refused(table, **others):
    with pytest.raises(InputError) as caught:
        read_inputs(
            pd.DataFrame(ORDERS),
            pd.DataFrame(MARKET),
            corridors=table,
            **{name: pd.DataFrame(other) for name, other in others.items()},
        )
    return [(p.row, p.column, p.value, p.rule, p.remedy) for p in caught.value.problems]


def test_factors_and_groups_are_known():
    """Unknown ones are refused with those that are known."""
    unknown = row(kind="factor:value", upper="1")
    rule = "names no known factor"
    expected = [(2, "kind", "factor:value", rule, "known: market, size")]
    assert _refused(unknown, **FACTORS) == expected
    expected = [(2, "kind", "factor:value", rule, "factors come with the exposures table")]
    assert _refused(unknown) == expected
    group = row(kind="group:mills", upper="1")
    rule, remedy = "names no known group", "groups come with the market table's group"
    assert _refused(group) == [(2, "kind", "group:mills", rule, remedy)]
    grouped = pd.DataFrame(MARKET).assign(group=["ports", "mills"])
    inputs = read_inputs(pd.DataFrame(ORDERS), grouped, corridors=group)
    assert inputs.corridors is not None
    factors = {name: pd.DataFrame(table) for name, table in FACTORS.items()}
    known = row(kind="factor:size", upper="1")
    assert read_inputs(pd.DataFrame(ORDERS), grouped, corridors=known, **factors)


def test_exposures_that_could_not_be_read_are_not_called_missing():
    """One problem, of the table that has it."""
    tables = {
        "exposures": changed(EXPOSURES, size="x"),
        "corridors": row(kind="factor:size", upper="1"),
    }
    with pytest.raises(InputError) as caught:
        read_tables(tables)
    assert [p.source for p in caught.value.problems] == ["exposures"]


def test_an_amount_and_a_percentage_are_compared_by_the_orders():
    """5 % of what is to be traded, 12000 at 101.25 and 800 at 7.5, in base currency."""
    ((_, column, value, rule, _),) = _refused(row(lower="61100", upper="5%"))
    assert (column, value) == ("lower", "61100")
    assert rule == "is above upper, 100 % being 1,221,000"
    fine = row(lower="61050", upper="5%")
    assert read_inputs(pd.DataFrame(ORDERS), pd.DataFrame(MARKET), corridors=fine)
