"""Flags: Holm's method against statsmodels, and false alarms at no more than the stated rate."""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.shortfall.chance import both_sides, holm


def test_adjusted_chances_against_a_general_library() -> None:
    multitest = pytest.importorskip("statsmodels.stats.multitest")
    rng = np.random.default_rng(1)
    for count in (1, 2, 7, 200):
        chance = rng.uniform(0.0, 1.0, count) ** 3
        _, theirs, _, _ = multitest.multipletests(chance, method="holm")
        assert holm(chance) == pytest.approx(theirs)


def test_adjusted_chances_by_hand() -> None:
    """0.01, 0.03, 0.04 of three: 0.03, 0.06, and not below the one before; NaN asks nothing."""
    given = np.array([0.04, np.nan, 0.01, 0.03])
    assert holm(given)[[0, 2, 3]] == pytest.approx([0.06, 0.03, 0.06])
    assert np.isnan(holm(given)[1])
    assert holm(np.array([])).tolist() == []


@pytest.mark.parametrize("common", [0.0, 0.5, 0.9])
def test_a_list_with_nothing_wrong_is_seldom_flagged(common: float) -> None:
    """2,000 lists of 20 orders, half of them sells, that share a market: 5 % or fewer, 4 errors."""
    rng = np.random.default_rng(7)
    side = np.where(np.arange(20) % 2, 1.0, -1.0)
    market = side * rng.standard_normal((2_000, 1))
    z = np.sqrt(common) * market + np.sqrt(1.0 - common) * rng.standard_normal((2_000, 20))
    from scipy.special import ndtr

    flagged = np.array([(holm(both_sides(ndtr(row))) <= 0.05).any() for row in z])
    assert flagged.mean() <= 0.05 + 4.0 * np.sqrt(0.05 * 0.95 / 2_000)


def test_an_outcome_in_the_middle_is_no_surprise() -> None:
    assert both_sides(np.array([0.5, 0.975, 0.01, 1.0])).tolist() == pytest.approx(
        [1.0, 0.05, 0.02, 0.0]
    )
