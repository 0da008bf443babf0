"""The factor_covariance table: square, symmetric and without negative eigenvalue."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal

from scheduler.tables import factor_covariance
from scheduler.tables.factor_covariance import covariance_matrix
from tests.samples import FACTOR_COVARIANCE, changed, csv_text, refused

NAMES = ["market", "size", "value"]


def table(matrix, rows=NAMES, columns=NAMES):
    """The table of a matrix whose columns may stand in another order than its rows."""
    frame = pd.DataFrame(np.asarray(matrix, dtype=float), rows, rows)[columns]
    return frame.rename_axis("factor").reset_index()


def with_eigenvalues(*values):
    """A symmetric matrix of three factors that has them, in directions of no axis."""
    rng = np.random.default_rng(4)
    vectors, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    matrix = (vectors * np.array(values)) @ vectors.T
    return (matrix + matrix.T) / 2


def read(frame):
    return factor_covariance.ensure(frame)


def test_columns_are_put_in_the_order_of_the_rows():
    """The same names in any order; the matrix can then be had in any order, too."""
    matrix = with_eigenvalues(3.0, 2.0, 1.0)
    checked = read(table(matrix, columns=["value", "market", "size"]))
    assert list(checked.frame.columns) == ["factor", *NAMES]
    assert np.array_equal(covariance_matrix(checked, NAMES), matrix)
    turned = covariance_matrix(checked, NAMES[::-1])
    assert np.array_equal(turned, matrix[::-1, ::-1])


@settings(max_examples=30)
@given(st.integers(min_value=0, max_value=2**32 - 1), st.integers(min_value=1, max_value=6))
def test_a_sample_covariance_is_accepted_as_it_is(seed, size):
    """Of fewer days than factors, too, where eigenvalues are 0 but for rounding."""
    rng = np.random.default_rng(seed)
    days = rng.normal(size=(size, 4)) * 10.0 ** rng.uniform(-5, 1, (size, 1))
    matrix = (days[:, None] * days).sum(axis=2) / 4
    names = [f"f{at}" for at in range(size)]
    checked = read(table(matrix, names, names))
    assert checked.notes == ()
    assert np.array_equal(covariance_matrix(checked, names), matrix)
    assert_frame_equal(read(checked.frame).frame, checked.frame)


def test_names_that_are_only_rows_or_only_columns_are_refused():
    """Each with its place."""
    frame = pd.DataFrame(FACTOR_COVARIANCE).rename(columns={"size": "value"})
    found = refused(read, frame)
    assert [(p.row, p.column, p.value, p.rule) for p in found] == [
        (1, "value", None, "has no row"),
        (3, "factor", "size", "has no column"),
    ]


@pytest.mark.parametrize(
    ("column", "value", "rule"),
    [
        ("size", "", "must not be empty"),
        ("size", "nan", "is not finite"),
        ("size", "-2e-5", "is a negative variance"),
        ("factor", "market", "repeats the factor of row 2"),
        ("factor", "=size", "must not begin with = + - @, tab or return"),
    ],
)
def test_a_bad_cell_is_named(put, column, value, rule):
    """By file, editor row, column, text and rule; among others that it may entail."""
    path = put("f.csv", csv_text(changed(FACTOR_COVARIANCE, **{column: value})))
    found = [p for p in refused(read, path) if p.rule == rule]
    assert [(p.source, p.row, p.column, p.value or "") for p in found] == [(path, 3, column, value)]


def test_a_pair_of_two_values_is_refused_with_both_its_places():
    """Beyond 1e-8 of the root of the two variances' product."""
    (problem,) = refused(read, changed(FACTOR_COVARIANCE, market="-0.00001001"))
    assert (problem.row, problem.column, problem.value) == (2, "size", "-0.00001")
    assert problem.rule == "differs from -1.001e-05 in row 3, column market"
    assert "give market and size one value" in problem.remedy


def test_a_smaller_difference_is_halved():
    """Within 1e-8: rounding, and the mean of both is taken."""
    matrix = with_eigenvalues(3.0, 2.0, 1.0)
    skewed = matrix.copy()
    skewed[0, 2] += 1e-9
    result = covariance_matrix(read(table(skewed)), NAMES)
    assert np.array_equal(result, result.T)
    assert result[0, 2] == pytest.approx(matrix[0, 2] + 5e-10, abs=1e-15)


def test_a_negative_eigenvalue_is_refused_with_its_size_and_direction():
    """A correlation above 1 names the pair it is of."""
    matrix = np.diag([100.0, 4.0, 4.0])
    matrix[1, 2] = matrix[2, 1] = 5.0
    (problem,) = refused(read, table(matrix))
    assert (problem.row, problem.column) == (None, None)
    assert problem.rule == (
        "has the negative eigenvalue -1 (0.01 of the largest), mostly of size and value"
    )
    assert "no portfolio has a negative variance" in problem.remedy
    (worse,) = refused(read, table(with_eigenvalues(1.0, 0.5, -2e-8)))
    assert "negative eigenvalue -2e-08 (2e-08 of the largest)" in worse.rule


def test_a_small_negative_eigenvalue_is_put_to_zero():
    """Within 1e-8 of the largest, with a note; the others stay."""
    checked = read(table(with_eigenvalues(1.0, 0.5, -5e-9)))
    values = np.linalg.eigvalsh(covariance_matrix(checked, NAMES))
    assert values == pytest.approx([0.0, 0.5, 1.0], abs=1e-15)
    assert checked.notes == (
        "factor_covariance: negative eigenvalues, down to 5e-09 of the largest, put to 0",
    )
    again = read(checked.frame)
    assert again.notes == ()
    assert_frame_equal(again.frame, checked.frame)


def test_factors_that_never_move_are_accepted():
    """No variance at all is no risk, and no error."""
    checked = read(table(np.zeros((3, 3))))
    assert not covariance_matrix(checked, NAMES).any()
