"""The impact law from own fills: known truth, what cannot be told apart, published magnitudes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scheduler.errors import InputError
from scheduler.history import slippage
from scheduler.history.slippage import EXPONENT, OBSERVED, RELAXATION, Surface, fit_law
from tests.executed_past import read, slipped, tables

DEFAULT = np.array([np.sqrt(2.0), 0.5, 0.05])


@pytest.fixture(scope="module")
def past():
    return read(tables())


@pytest.fixture(autouse=True)
def _quicker(monkeypatch):
    """Fewer draws, and one surface for all samples of the same orders."""
    known = {}

    def surface(past):
        key = tuple(map(id, (past.sessions, past.shares, past.market)))
        if key not in known:
            known[key] = past, Surface(past)  # the orders are kept, so that no id comes twice
        return known[key][1]

    monkeypatch.setattr(slippage, "DRAWS", 49)
    monkeypatch.setattr(slippage, "Surface", surface)


def covers(law, truth):
    return (law.intervals[:, 0] <= truth) & (truth <= law.intervals[:, 1])


def test_the_surface_is_the_model(past):
    """To a thousandth between its points, anywhere in its range; slopes by differences."""
    surface, rng = Surface(past), np.random.default_rng(0)
    for _ in range(10):
        exponent, log_r = rng.uniform(0.12, 1.28), rng.uniform(np.log(1.1e-3), np.log(7.5))
        value, along, across = surface.at(exponent, log_r)
        assert np.exp(value) == pytest.approx(past.predicted(exponent, np.exp(log_r)), rel=2e-3)
        ends = [surface.at(exponent + h, log_r)[0] for h in (1e-5, -1e-5)]
        assert along == pytest.approx((ends[0] - ends[1]) / 2e-5, rel=1e-4, abs=1e-6)
        ends = [surface.at(exponent, log_r + h)[0] for h in (1e-5, -1e-5)]
        assert across == pytest.approx((ends[0] - ends[1]) / 2e-5, rel=1e-4, abs=1e-6)


@pytest.mark.parametrize("truth", [(1.414, 0.5, 0.05), (1.0, 0.6, 0.3)])
def test_a_law_without_noise_is_found_exactly(past, truth):
    law = fit_law(slipped(past, truth, noise=1e-4), "fills")
    assert law.values == pytest.approx(truth, rel=0.01)
    assert law.identified


def test_a_law_is_recovered_within_its_intervals(past):
    """Six samples, 18 intervals of 95 %: at most 3 miss (were they independent: 1 % chance)."""
    truth = np.array([1.0, 0.6, 0.3])
    found = [covers(fit_law(slipped(past, tuple(truth), seed=s), "f"), truth) for s in range(6)]
    assert np.sum(found) >= 15


def test_wild_fills_hardly_move_it(past):
    """One order in twenty off by ten times its standard deviation."""
    sample = slipped(past, (1.414, 0.5, 0.05), noise=0.1)
    clean = fit_law(sample, "fills").values
    off = np.where(np.arange(len(past)) % 20 == 0, 10.0 * past.error, 0.0)
    wild = fit_law(replace(sample, slippage=sample.slippage + off), "fills").values
    assert wild[0] == pytest.approx(clean[0], rel=0.2)
    assert wild[1] == pytest.approx(clean[1], abs=0.1)


def test_orders_of_one_size_and_length_leave_it_open():
    """Said, and the fit is near the publications, with about their spread."""
    alike = read(tables(sizes=(0.05, 0.0501), minutes=(120.0, 120.1)))
    law = fit_law(slipped(alike, (1.414, 0.5, 0.05)), "fills")
    assert not law.identified
    assert "say less than the publications do" in law.reasons[0]
    assert law.condition > 100.0
    assert law.information < 0.1
    assert law.values[1] == pytest.approx(EXPONENT[0], abs=EXPONENT[1])
    width = law.intervals[1, 1] - law.intervals[1, 0]
    assert width > 2.0 * EXPONENT[1]
    report = law.as_dict()
    assert report["drawn_to_publications"]
    assert report["without_publications"]["impact_exponent"]["interval"] is not None
    assert not law.excludes(DEFAULT)


def test_the_joint_test_knows_the_default_from_another_law(past):
    same = fit_law(slipped(past, tuple(DEFAULT), seed=3), "fills")
    other = fit_law(slipped(past, (0.8, 0.7, 0.5), seed=3), "fills")
    assert not same.excludes(DEFAULT)
    assert other.excludes(DEFAULT)


def test_slippage_in_another_unit_of_price_or_volume_is_the_same_law(past):
    """A split: prices halved, shares doubled."""
    sample = slipped(past, (1.414, 0.5, 0.05))
    market = replace(past.market, price=past.market.price / 2, adv=2 * past.market.adv)
    halved = replace(sample, market=market, shares=2 * past.shares)
    assert fit_law(halved, "f").values == pytest.approx(fit_law(sample, "f").values, rel=1e-5)


def test_published_magnitudes_are_met_by_the_published_law():
    """Sato & Kanazawa (Phys. Rev. Lett. 135, 257401): 0.842 (Q/V)^0.489, 17.7 bp at 1 % and 2 %.

    Orders of about 1 % of ADV by their law, nothing fading: two thirds of 17.7 bp is paid.
    """
    past = read(tables(40, days=8, sizes=(0.01, 0.01001), minutes=(30.0, 31.0)))
    paid = 0.842 * np.sqrt(1.5) * past.predicted(0.489, 1e3)
    size = past.quantity / past.market.adv
    assert paid * 200.0 == pytest.approx(17.7 * (size / 0.01) ** 0.489 / 1.489, rel=5e-3)


def test_the_publications_agree_with_the_laws_of_the_program():
    """Each published constant, exponent and relaxation is within two spreads of the mean."""
    from scheduler.model.laws import IMPACT_LAWS

    for name in ("imbalance", "root-lasting", "invariance-root"):
        law = IMPACT_LAWS[name]
        observed = float(law.coefficient(np.array([0.25]))[0]) / np.sqrt(1.5)
        assert abs(np.log(observed / OBSERVED[0])) < 2.0 * OBSERVED[1]
    for law in IMPACT_LAWS.values():
        assert abs(law.exponent - EXPONENT[0]) < 2.0 * EXPONENT[1]
        assert abs(np.log(law.relaxation / RELAXATION[0])) <= 2.0 * RELAXATION[1]


@pytest.mark.parametrize(("count", "days"), [(29, 20), (100, 7)])
def test_too_few_orders_or_days_are_refused(count, days):
    with pytest.raises(InputError, match="needs 30 orders on 8 days, or more"):
        fit_law(slipped(read(tables(count, days=days)), tuple(DEFAULT)), "fills.csv")


@pytest.mark.slow
def test_intervals_of_the_law_cover_as_often_as_they_say(past, monkeypatch):
    """Of 200 samples; the draws are few, so a little leeway."""
    monkeypatch.setattr(slippage, "DRAWS", 99)
    truth = np.array([1.0, 0.6, 0.3])
    found = [covers(fit_law(slipped(past, tuple(truth), seed=s), "f"), truth) for s in range(200)]
    assert (np.mean(found, axis=0) >= 0.90).all()
