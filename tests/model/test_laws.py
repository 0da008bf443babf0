"""Impact laws: what k, delta, r and gamma mean, apart from the published numbers."""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.model.laws import IMPACT_LAWS, invariance_spread_bps, observed


@pytest.mark.parametrize("name", sorted(set(IMPACT_LAWS) - {"imbalance"}))
def test_laws_on_observed_volatility_do_not_depend_on_the_level_rate(name: str) -> None:
    """k sigma_0 is the published constant times sigma, whatever nu."""
    rates = np.array([0.0, 0.25, 2.0])
    on_observed = IMPACT_LAWS[name].coefficient(rates) / np.sqrt(1.0 + 2.0 * rates)
    assert on_observed == pytest.approx(np.full(3, on_observed[0]))


def test_imbalance_law_is_on_ground_volatility() -> None:
    """k = sqrt 2 whatever nu [Orrell 2020]."""
    assert IMPACT_LAWS["imbalance"].coefficient(np.array([0.0, 3.0])) == pytest.approx(np.sqrt(2.0))


def test_observed_constant_is_raised_to_ground_volatility() -> None:
    assert observed(0.8)(np.array([0.25])) == pytest.approx(0.8 * np.sqrt(1.5))


def test_only_rate_power_has_a_permanent_part() -> None:
    """gamma = 0.314 (Theta/V)^{1/4}, Theta/V = 200 where it is not known."""
    turnover = np.array([16.0, np.nan])
    gamma = IMPACT_LAWS["rate-power"].permanent(turnover)
    assert gamma == pytest.approx([0.628, 0.314 * 200.0**0.25])
    for name in set(IMPACT_LAWS) - {"rate-power"}:
        assert (IMPACT_LAWS[name].permanent(turnover) == 0.0).all()


def test_invariance_spread_narrows_with_trading_activity() -> None:
    """W^{-1/3}: eight times the activity halves the spread over volatility."""
    one = invariance_spread_bps(np.array([40.0]), np.array([1e6]), np.array([0.02]))
    more = invariance_spread_bps(np.array([40.0]), np.array([8e6]), np.array([0.02]))
    assert one == pytest.approx(4.16)
    assert more == pytest.approx(one / 2.0)
