"""The distribution and the frontier that the charts show."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from scheduler.report.chart import filled
from scheduler.report.charts import CHARTS
from scheduler.report.density import density
from scheduler.report.frontier import frontiers
from tests.report.plans import one_order, three_orders

PLANS = [(three_orders, order) for order in range(3)]


def test_density_is_the_poisson_mixture():
    """One session: over n, Poisson(n; nu) times a normal of variance a + 2nb [Orrell 2020]."""
    figures = one_order().figures
    drawn = density(figures, 0)
    base, own = (values.sum() for values in figures.stage_variance)
    rate = 0.25
    level = base / (1.0 + 2.0 * rate)
    bps = 1e4 / figures.notional[0]
    expected = sum(
        math.exp(-rate)
        * rate**n
        / math.factorial(n)
        * stats.norm.pdf(
            drawn["density_x"],
            bps * figures.expected_cost[0],
            bps * math.sqrt(level + own + 2.0 * n * level),
        )
        for n in range(12)
    )
    np.testing.assert_allclose(drawn["mixture"], expected, rtol=2e-3)


@pytest.mark.parametrize(("made", "order"), PLANS)
def test_marks_are_the_summarys_quantiles(made, order):
    plan = made()
    drawn = density(plan.figures, order)
    row = list(plan.summary["orders"].values())[order]
    bps = 1e4 / row["notional"]
    expected = [bps * row["quantiles"][p] for p in ("0.05", "0.5", "0.95", "0.99")]
    expected.append(bps * row["expected_shortfall_95"])
    np.testing.assert_allclose(drawn["label_x"], expected, rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(drawn["mark_x"][::3], expected[:4], rtol=1e-6, atol=1e-6)
    assert f"{expected[2]:,.1f}" in drawn["label_text"][2]


@pytest.mark.parametrize(("made", "order"), PLANS)
def test_the_normal_has_the_same_mean_and_deviation(made, order):
    plan = made()
    drawn = density(plan.figures, order)
    row = list(plan.summary["orders"].values())[order]
    law = stats.norm(row["expected_cost_bps"], row["cost_std_bps"])
    np.testing.assert_allclose(drawn["normal"], law.pdf(drawn["density_x"]), rtol=1e-9)
    assert max(drawn["mixture"]) > max(drawn["normal"])  # fat tails, so a higher peak


@pytest.mark.parametrize("order", range(3))
def test_frontier_rises_as_risk_falls(order):
    """Along rising urgency the risk falls and the cost rises."""
    drawn = frontiers(three_orders(), np.arange(3))[order]
    assert len(drawn["frontier_risk"]) == 24
    assert (np.diff(drawn["frontier_urgency"]) >= 0.0).all()
    assert (np.diff(drawn["frontier_risk"]) <= 1e-6).all()
    assert (np.diff(drawn["frontier_cost"]) >= -1e-6).all()
    assert drawn["frontier_risk"][-1] < 0.95 * drawn["frontier_risk"][0]


@pytest.mark.parametrize("order", range(3))
def test_the_plan_is_on_the_frontier_and_rivals_are_not_below_it(order):
    """The plan's point differs from the curve by whole lots only: a hundredth of a basis point."""
    drawn = frontiers(three_orders(), np.arange(3))[order]
    row = list(three_orders().summary["orders"].values())[order]
    assert drawn["plan_risk"] == [row["cost_std_bps"]]
    curve = drawn["frontier_risk"][::-1], drawn["frontier_cost"][::-1]
    least = np.interp(drawn["plan_risk"][0], *curve)
    assert drawn["plan_cost"][0] == pytest.approx(least, abs=0.02)
    for name in ("evenly", "by_volume"):
        if curve[0][0] <= drawn[f"{name}_risk"][0] <= curve[0][-1]:
            assert drawn[f"{name}_cost"][0] >= np.interp(drawn[f"{name}_risk"][0], *curve) - 0.02
        else:  # more risk than even the most patient
            assert drawn[f"{name}_cost"][0] >= curve[1][-1] - 0.02


def test_frontiers_of_some_orders_are_those_of_all():
    """Solving many orders at once changes nothing."""
    together = frontiers(three_orders(), np.arange(3))
    alone = frontiers(three_orders(), np.array([2]))[0]
    np.testing.assert_allclose(alone["frontier_cost"], together[2]["frontier_cost"], rtol=1e-6)


def test_every_name_in_a_description_must_have_a_value():
    """A description with a name that has no value cannot be drawn by half."""
    with pytest.raises(KeyError):
        filled(CHARTS["cost"].traces, {"cost": [1.0]})
