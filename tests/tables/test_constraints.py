"""The constraints table: limits given once a name, and everything that can be wrong with it."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from pandas.testing import assert_frame_equal

from scheduler import read_constraints
from scheduler.errors import InputError
from scheduler.tables import constraints
from scheduler.tables.inputs import read_inputs
from scheduler.tables.write import write_file
from tests.samples import CONSTRAINTS, MARKET, ORDERS, changed, csv_text, refused


def test_limits_are_those_of_the_whole_name():
    """Given in any one row, or alike in several; another name has its own."""
    frame = constraints.ensure(
        pd.DataFrame(
            {
                "name": ["a", "b", "a", "b"],
                "order_id": ["o-1", "o-1", "o-2", "o-2"],
                "bucket": ["1", "2", "3", "4"],
                "coefficient": ["1", "2", "-3", "4e2"],
                "lower": ["", "7", "5", "7.0"],
                "upper": ["9", "", "", ""],
            }
        )
    ).frame
    assert frame["lower"].tolist() == [5.0, 7.0, 5.0, 7.0]
    assert frame["upper"].tolist()[::2] == [9.0, 9.0]
    assert np.isnan(frame["upper"].to_numpy()[1::2]).all()
    assert frame["coefficient"].tolist() == [1.0, 2.0, -3.0, 400.0]
    assert_frame_equal(constraints.ensure(frame).frame, frame)


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_a_canonical_frame_written_and_read_is_itself(tmp_path, suffix):
    """Through both kinds of file."""
    frame = read_constraints(pd.DataFrame(CONSTRAINTS))
    write_file(tmp_path / f"t{suffix}", frame)
    assert_frame_equal(read_constraints(tmp_path / f"t{suffix}"), frame)


@pytest.mark.parametrize(
    ("column", "value", "rule", "remedy"),
    [
        ("name", "", "must not be empty", "name for the constraint"),
        ("name", "=sum", "must not begin with", "rename"),
        ("order_id", "", "must not be empty", "as in the orders table"),
        ("bucket", "0", "must be at least 1", "from 1"),
        ("bucket", "1.5", "is not a whole number", "count buckets"),
        ("bucket", "first", "is not a number", "decimal point"),
        ("coefficient", "0", "is 0", "leave the row out"),
        ("coefficient", "", "must not be empty", "what a share counts"),
        ("coefficient", "1,5", "has a comma in a number", "decimal point"),
        ("upper", "400", "differs within one constraint", "give it once"),
        ("lower", "5%", "is written as a percentage", "plain number"),
        ("lower", "1e16", "must be from -1e+15 to 1e+15", "expected"),
    ],
)
def test_a_bad_cell_is_named(put, column, value, rule, remedy):
    """By file, editor row, column, text, rule and remedy."""
    path = put("c.csv", csv_text(changed(CONSTRAINTS, **{column: value})))
    problem = refused(constraints.ensure, path)[0]
    assert (problem.source, problem.row, problem.column) == (path, 3, column)
    assert (problem.value or "") == value
    assert rule in problem.rule
    assert remedy in problem.remedy


def test_a_constraint_needs_a_limit_that_can_be_kept():
    """One problem a name, at its first row."""
    bare = pd.DataFrame(CONSTRAINTS | {"upper": ["", ""]})
    (problem,) = refused(constraints.ensure, bare)
    assert (problem.row, problem.column) == (2, "name")
    assert problem.rule == "has no limit on either side"
    (problem,) = refused(constraints.ensure, bare.drop(columns=["lower", "upper"]))
    assert problem.rule == "has no limit on either side"
    crossed = changed(CONSTRAINTS, lower="501")
    (problem,) = refused(constraints.ensure, crossed)
    assert problem.rule == "has a lower limit, 501, above its upper one, 500"


def test_a_bucket_counts_once_in_a_constraint():
    """The same bucket in another constraint is another matter."""
    twice = changed(CONSTRAINTS, order_id="o-1")
    (problem,) = refused(constraints.ensure, twice)
    assert problem.rule == "repeats the name and order_id and bucket of row 2"
    assert len(constraints.ensure(changed(CONSTRAINTS, order_id="o-1", name="b", upper="1")).frame)


def test_orders_are_known():
    """An order_id that the orders table lacks is refused."""
    table = changed(CONSTRAINTS, order_id="o-3")
    with pytest.raises(InputError) as caught:
        read_inputs(pd.DataFrame(ORDERS), pd.DataFrame(MARKET), constraints=table)
    (problem,) = caught.value.problems
    assert (problem.row, problem.column, problem.value) == (3, "order_id", "o-3")
    assert problem.rule == "is not in the orders table orders"
