"""The factor model: its diagonal, its units, and what a history of returns says of it."""

from __future__ import annotations

import datetime
import sys

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.covariance import LedoitWolf

from scheduler.errors import InputError, MissingExtraError, MisuseError
from scheduler.riskmodel import (
    MOST_FACTORS,
    SPECIFIC_FLOOR,
    RiskModel,
    from_exposures,
    from_returns,
    noise_edge,
)
from scheduler.tables import exposures, factor_covariance, returns


def table(values, names, key, labels):
    return pd.DataFrame(np.asarray(values), columns=names).assign(**{key: labels})[[key, *names]]


def factor_tables(loadings, covariance, symbols):
    names = [f"f{at}" for at in range(len(covariance))]
    return (
        exposures.ensure(table(loadings, names, "symbol", symbols)),
        factor_covariance.ensure(table(covariance, names, "factor", names)),
    )


def history(sample, symbols, last="2026-02-27"):
    dates = np.datetime64(last) - np.arange(len(sample))[::-1]
    return returns.ensure(table(sample, list(symbols), "date", dates.astype(str)))


def names_of(count):
    return [f"S{at}" for at in range(count)]


def total(model):
    """Sigma, (N, N)."""
    common = model.exposures @ model.covariance @ model.exposures.T
    return common + np.diag(model.specific)


def random_factors(seed, count=6, factors=3):
    """Exposures, covariance, and volatilities above what the factors claim."""
    rng = np.random.default_rng(seed)
    loadings = rng.normal(size=(count, factors))
    root = rng.normal(0.0, 0.005, (factors, factors))
    covariance = root @ root.T
    claimed = np.sqrt(np.einsum("nk,kl,nl->n", loadings, covariance, loadings))
    return loadings, covariance, claimed * rng.uniform(1.05, 3.0, count)


def random_history(seed, days=90, count=7, factors=1):
    """Returns of names that move together in the given number of ways."""
    rng = np.random.default_rng(seed)
    common = rng.normal(size=(days, factors)) @ rng.normal(1.0, 0.5, (factors, count))
    return 0.01 * (common + rng.normal(size=(days, count)))


SEEDS = st.integers(min_value=0, max_value=2**32 - 1)


@settings(max_examples=30)
@given(SEEDS)
def test_the_diagonal_is_the_market_tables(seed):
    """psi takes what the factors leave, above 0, and the covariance is positive semidefinite."""
    loadings, covariance, vol = random_factors(seed)
    symbols = names_of(6)
    model, notes = from_exposures(*factor_tables(loadings, covariance, symbols), symbols, vol)
    assert np.diag(total(model)) == pytest.approx(vol**2, rel=1e-14)
    assert (model.specific > 0).all()
    assert notes == ()
    off = ~np.eye(6, dtype=bool)
    assert total(model)[off] == pytest.approx((loadings @ covariance @ loadings.T)[off], rel=1e-9)


@given(SEEDS)
def test_orthonormal_exposures_square_to_the_factor_part(seed):
    """L L' = B F B', with a column for each direction that F has, in any units of the factors."""
    rng = np.random.default_rng(seed)
    loadings = rng.normal(size=(5, 4))
    root = rng.normal(size=(4, int(rng.integers(1, 5))))
    units = 10.0 ** rng.uniform(-5, 5, 4)
    factor = (root @ root.T) * np.outer(units, units)
    model = RiskModel(("a", "b", "c", "d"), loadings / units, factor, np.ones(5))
    found = model.orthonormal()
    expected = loadings @ root @ root.T @ loadings.T
    assert found @ found.T == pytest.approx(expected, abs=1e-9 * np.abs(expected).max())
    assert found.shape == (5, root.shape[1])


def test_factors_without_variance_have_no_orthonormal_exposures():
    """All of F null: no column; one factor null: one column fewer."""
    still = RiskModel(("a", "b"), np.ones((3, 2)), np.zeros((2, 2)), np.ones(3))
    assert still.orthonormal().shape == (3, 0)
    half = RiskModel(("a", "b"), np.ones((3, 2)), np.diag([4.0, 0.0]), np.ones(3))
    assert np.abs(half.orthonormal()).tolist() == [[2.0]] * 3


def test_rows_are_those_of_the_symbols_asked_for():
    """Of a table that has more, and in another order."""
    loadings, covariance, vol = random_factors(1)
    symbols = names_of(6)
    tables = factor_tables(loadings, covariance, symbols)
    whole, _ = from_exposures(*tables, symbols, vol)
    part, _ = from_exposures(*tables, ["S4", "S1"], vol[[4, 1]])
    assert part.factors == ("f0", "f1", "f2")
    assert np.array_equal(total(part), total(whole)[np.ix_([4, 1], [4, 1])])


def test_factors_that_claim_a_little_too_much_are_scaled_down():
    """Up to a quarter more than the volatility: the name keeps SPECIFIC_FLOOR of its variance."""
    vol = np.array([0.02, 0.02, 0.02])
    loadings = [[2.4], [2.0], [1.0]]  # of a factor of 1 % a day: 2.4, 2 and 1 %
    model, notes = from_exposures(*factor_tables(loadings, [[1e-4]], names_of(3)), names_of(3), vol)
    assert model.specific == pytest.approx([4e-4 * SPECIFIC_FLOOR, 4e-4 * SPECIFIC_FLOOR, 3e-4])
    assert np.diag(total(model)) == pytest.approx(vol**2, rel=1e-14)
    assert model.exposures[2, 0] == 1.0
    assert len(notes) == 1
    assert "exposures scaled down" in notes[0]
    assert notes[0].endswith("for S0, S1")


def test_factors_that_claim_far_too_much_are_refused():
    """More than a quarter above the volatility is a wrong unit; both figures are said."""
    tables = factor_tables([[3.1], [1.0]], [[1e-4]], ["QUAY", "MILL"])
    with pytest.raises(InputError) as caught:
        from_exposures(*tables, ["QUAY", "MILL"], np.array([0.019, 0.02]))
    (problem,) = caught.value.problems
    assert (problem.source, problem.row, problem.value) == ("exposures", 2, "QUAY")
    assert problem.rule == "factors claim 3.1 % a day, the market table says 1.9 %"
    assert "is factor_covariance per day" in problem.remedy
    close, _ = from_exposures(*tables, ["QUAY", "MILL"], np.array([0.02481, 0.02]))
    assert close.specific[0] == pytest.approx(0.02481**2 * SPECIFIC_FLOOR)


def test_symbols_without_exposures_are_named():
    """Each of them, in one go."""
    tables = factor_tables([[1.0]], [[1e-4]], ["QUAY"])
    with pytest.raises(InputError) as caught:
        from_exposures(*tables, ["WEIR", "QUAY", "MILL"], np.full(3, 0.02))
    assert [p.value for p in caught.value.problems] == ["WEIR", "MILL"]


@pytest.mark.parametrize(("days", "count"), [(60, 5), (250, 12), (60, 90)])
def test_with_all_factors_it_is_the_libraries_shrunk_covariance(days, count):
    """Of returns scaled to variance 1: LedoitWolf of scikit-learn, fitted apart; also for N > T."""
    sample = random_history(3, days, count)
    vol = np.random.default_rng(5).uniform(0.01, 0.04, count)
    symbols = names_of(count)
    most = min(count, days - 1)
    model, notes = from_returns(history(sample, symbols), symbols, vol, factors=most)
    fitted = LedoitWolf().fit((sample - sample.mean(axis=0)) / sample.std(axis=0))
    assert 0 < fitted.shrinkage_ < 1
    expected = fitted.covariance_ * np.outer(vol, vol)
    assert total(model) == pytest.approx(expected, rel=1e-9, abs=1e-12)
    assert f"shrinkage {fitted.shrinkage_:.2g}" in notes[0]


@settings(max_examples=15)
@given(SEEDS)
def test_the_diagonal_holds_for_any_number_of_factors(seed):
    """Volatilities are the market table's, and no specific variance is negative."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 9))
    vol = rng.uniform(0.005, 0.05, count)
    checked = history(random_history(seed, 60, count), names_of(count))
    for factors in (None, *range(1, count + 1)):
        model, _ = from_returns(checked, names_of(count), vol, factors=factors)
        assert np.diag(total(model)) == pytest.approx(vol**2, rel=1e-12)
        assert (model.specific >= 0.999 * SPECIFIC_FLOOR * vol**2).all()


@settings(max_examples=15)
@given(SEEDS, st.permutations(range(7)))
def test_the_order_of_the_symbols_does_not_matter(seed, order):
    """Permuted symbols give the permuted covariance."""
    vol = np.linspace(0.01, 0.04, 7)
    symbols = names_of(7)
    checked = history(random_history(seed), symbols)
    model, _ = from_returns(checked, symbols, vol, factors=2)
    turned, _ = from_returns(checked, [symbols[at] for at in order], vol[order], factors=2)
    assert total(turned) == pytest.approx(total(model)[np.ix_(order, order)], abs=1e-12)


@settings(max_examples=15)
@given(SEEDS)
def test_units_of_returns_do_not_matter_and_those_of_volatility_do(seed):
    """Each symbol's returns scaled: the same model. Volatilities scaled: the model scaled."""
    rng = np.random.default_rng(seed)
    sample, vol = random_history(seed), rng.uniform(0.01, 0.04, 7)
    factor = rng.uniform(0.2, 5.0, 7)
    symbols = names_of(7)
    model, _ = from_returns(history(sample, symbols), symbols, vol)
    scaled, _ = from_returns(history(sample * factor, symbols), symbols, vol * factor)
    expected = total(model) * np.outer(factor, factor)
    assert total(scaled) == pytest.approx(expected, rel=1e-7, abs=1e-12)


def test_the_edge_of_noise_is_the_published_one():
    """1.94 for 1000 names and 6448 returns of half an hour: Plerou, Gopikrishnan, Rosenow,
    Amaral, Guhr & Stanley, Phys. Rev. E 65, 066126 (2002); 4 at N = T."""
    assert noise_edge(1000, 6448) == pytest.approx(1.94, abs=0.005)
    assert noise_edge(50, 50) == 4.0


def test_the_edge_of_noise_ends_the_published_density():
    """The density sqrt((b - x)(x - a))/(2 pi q x) of Marchenko & Pastur (1967) holds all
    eigenvalues, their mean 1 and their mean square 1 + q, between its edges."""
    q = 0.4
    low, high = (1.0 - np.sqrt(q)) ** 2, noise_edge(40, 100)
    angle = (np.arange(20_000) + 0.5) * np.pi / 20_000  # x = middle + half cos: smooth at the ends
    half = 0.5 * (high - low)
    x = 0.5 * (high + low) + half * np.cos(angle)
    weight = (half * np.sin(angle)) ** 2 / (2.0 * np.pi * q * x) * (np.pi / 20_000)
    moments = [float((weight * x**power).sum()) for power in range(3)]
    assert moments == pytest.approx([1.0, 1.0, 1.0 + q], rel=1e-9)


@pytest.mark.parametrize("planted", [1, 2, 4])
def test_as_many_factors_are_taken_as_stand_out(planted):
    """Common movements planted in noise are found, and no noise with them."""
    rng = np.random.default_rng(11)
    days, count = 250, 60
    groups = np.repeat(np.eye(planted), count // planted, axis=0)
    sample = 0.01 * (rng.normal(size=(days, planted)) @ groups.T + rng.normal(size=(days, count)))
    symbols = names_of(count)
    model, notes = from_returns(history(sample, symbols), symbols, np.full(count, 0.02))
    assert len(model.factors) == model.covariance.shape[0] == planted
    assert notes[0].startswith(f"returns: {planted} statistical factors from 250 days, shrinkage")
    if planted > 1:  # names of one group move together, those of two do not
        correlation = total(model) / 4e-4
        assert correlation[0, 1] > 0.35
        assert abs(correlation[0, -1]) < 0.15


def test_unrelated_names_keep_one_small_factor():
    """At least one is taken; shrinkage leaves next to nothing of it."""
    sample = np.random.default_rng(2).normal(0.0, 0.01, (250, 40))
    model, _ = from_returns(history(sample, names_of(40)), names_of(40), np.full(40, 0.02))
    assert len(model.factors) == 1
    assert (model.specific > 0.9 * 4e-4).all()


def test_no_more_than_thirty_factors_are_taken_unasked():
    """Though more stand out; asked for, there are more."""
    rng = np.random.default_rng(8)
    groups = np.repeat(np.eye(35), 4, axis=0)
    sample = 0.01 * (3 * rng.normal(size=(800, 35)) @ groups.T + rng.normal(size=(800, 140)))
    symbols, vol = names_of(140), np.full(140, 0.02)
    checked = history(sample, symbols)
    assert len(from_returns(checked, symbols, vol)[0].factors) == MOST_FACTORS
    assert len(from_returns(checked, symbols, vol, factors=35)[0].factors) == 35


def test_more_factors_than_there_can_be_are_misuse():
    """Names, and days less one for the mean, bound their number."""
    checked = history(random_history(1, 60, 70), names_of(70))
    with pytest.raises(MisuseError, match="from 1 to 59 for 70 names and 60 days"):
        from_returns(checked, names_of(70), np.full(70, 0.02), factors=60)
    with pytest.raises(MisuseError, match="from 1 to 2 for 2 names"):
        from_returns(checked, ["S1", "S2"], np.full(2, 0.02), factors=0)


def test_one_name_alone_is_its_own_factor():
    """All but the floor of its variance is the factor's; its volatility is the market's."""
    checked = history(random_history(6), names_of(7))
    model, _ = from_returns(checked, ["S3"], np.array([0.03]))
    assert total(model) == pytest.approx(np.array([[9e-4]]))
    assert model.specific == pytest.approx([9e-4 * SPECIFIC_FLOOR])


def test_symbols_without_returns_are_named():
    """Each of them, in one go."""
    checked = history(random_history(1), names_of(7))
    with pytest.raises(InputError) as caught:
        from_returns(checked, ["S0", "MILL", "WEIR"], np.full(3, 0.02))
    assert [p.column for p in caught.value.problems] == ["MILL", "WEIR"]


def test_a_late_listing_cuts_the_history_for_all():
    """Estimated from the days in common, with a note; the same as from those days alone."""
    sample = random_history(9, 100, 3)
    late = sample.copy()
    late[:20, 1] = np.nan
    vol = np.full(3, 0.02)
    model, notes = from_returns(history(late, names_of(3)), names_of(3), vol)
    expected, _ = from_returns(history(sample[20:], names_of(3)), names_of(3), vol)
    assert np.array_equal(total(model), total(expected))
    assert notes[0] == "returns: the first 20 of 100 days left out, before those of S1"


def test_an_old_history_is_noted():
    """More than ten days before the day planned for."""
    checked = history(random_history(1), names_of(7), last="2026-02-27")
    vol = np.full(7, 0.02)
    for day, old in ((9, False), (10, True)):
        date = datetime.date(2026, 3, day)
        _, notes = from_returns(checked, names_of(7), vol, date=date)
        said = "returns: the last return is of 2026-02-27, 11 days before 2026-03-10"
        assert (said in notes) is old


def test_without_the_library_the_remedy_is_said(monkeypatch):
    """The extra to install, and the other way to the same end."""
    monkeypatch.setitem(sys.modules, "sklearn.covariance", None)
    checked = history(random_history(1), names_of(7))
    with pytest.raises(MissingExtraError, match=r"pip install 'headrace\[risk\]', or give expos"):
        from_returns(checked, names_of(7), np.full(7, 0.02))
