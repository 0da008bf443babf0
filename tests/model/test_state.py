"""Decay and build-up of the imbalance against high precision and the differential equation."""

from __future__ import annotations

from collections.abc import Callable
from decimal import Decimal, localcontext

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from scheduler.model.ragged import Array, Ragged
from scheduler.model.state import (
    build_up,
    faded,
    imbalance,
    imbalance_at,
    reach_back,
    reach_back_short,
)

# both sides of the switch from series to closed form at 0.01, and far out
THETAS = (
    1e-300,
    1e-16,
    1e-12,
    1e-9,
    1e-6,
    1e-4,
    3e-3,
    9.99e-3,
    0.01,
    0.0101,
    0.3,
    2.0,
    50.0,
    700.0,
)


def _exact(theta: float, name: str) -> float:
    with localcontext() as context:
        context.prec = 700  # 1 - e^-theta of 1e-300 keeps 400 digits
        t = Decimal(theta)
        built = (1 - (-t).exp()) / t
        back = (-t).exp() / built
        values = {
            "build_up": built,
            "faded": 1 - built,
            "reach_back": back,
            "reach_back_short": 1 - back,
        }
        return float(values[name])


@pytest.mark.parametrize("function", [build_up, faded, reach_back, reach_back_short])
def test_bucket_factors_are_accurate_to_rounding(function: Callable[[Array], Array]) -> None:
    """Relative error below 1e-13 for every theta, in 700-digit arithmetic."""
    expected = [_exact(theta, function.__name__) for theta in THETAS]
    assert function(np.array(THETAS)) == pytest.approx(expected, rel=1e-13, abs=0.0)


def test_bucket_factors_at_no_volume() -> None:
    """A zero-volume bucket is a block: all of the slice is left at its end."""
    zero = np.zeros(1)
    assert (build_up(zero), faded(zero)) == (1.0, 0.0)
    assert (reach_back(zero), reach_back_short(zero)) == (1.0, 0.0)


def test_bucket_factors_do_not_overflow_in_very_long_buckets() -> None:
    far = np.array([1e4])
    assert build_up(far) == pytest.approx(1e-4, rel=1e-15)
    assert reach_back(far) == 0.0


@pytest.mark.parametrize("initial", [0.0, 300.0, -800.0])
def test_imbalance_solves_its_differential_equation(initial: float) -> None:
    """dZ = dq - Z dV/L [Alfonsi, Fruth & Schied 2010, model 1]; one stage trades nothing."""
    theta = np.array([0.3, 2.0, 0.7, 0.05, 6.0])
    shares = np.array([500.0, 0.0, 0.0, 900.0, 400.0])
    before, after = imbalance(Ragged(np.array([5])), theta, shares, np.array([initial]))
    z = initial
    for t in range(5):
        assert before[t] == pytest.approx(z, rel=1e-9, abs=1e-7)
        rate = lambda _, y, t=t: shares[t] - theta[t] * y  # noqa: E731
        path = solve_ivp(rate, (0.0, 1.0), [z], rtol=1e-11, atol=1e-9, dense_output=True)
        u = np.linspace(0.0, 1.0, 7)[:, None]
        inside = imbalance_at(u, theta, before, shares)[:, t]
        assert inside == pytest.approx(path.sol(u[:, 0])[0], rel=1e-8, abs=1e-6)
        z = path.y[0, -1]
    assert after[-1] == pytest.approx(z, rel=1e-8)


@given(st.integers(0, 2**32 - 1))
def test_a_bucket_cut_in_two_ends_in_the_same_state(seed: int) -> None:
    """Even trading at one rate does not care where the bucket boundaries are."""
    rng = np.random.default_rng(seed)
    theta, shares = 10.0 ** rng.uniform(-6, 2), rng.uniform(0, 1e4)
    cut, start = rng.uniform(0.01, 0.99), rng.uniform(-1e4, 1e4)
    parts = np.array([cut, 1.0 - cut])
    whole = imbalance(
        Ragged(np.array([1])), np.array([theta]), np.array([shares]), np.array([start])
    )
    split = imbalance(Ragged(np.array([2])), theta * parts, shares * parts, np.array([start]))
    assert split[1][-1] == pytest.approx(whole[1][-1], rel=1e-11, abs=1e-9)


def test_steady_trading_leads_to_the_participation_rate() -> None:
    """E/L tends to q_t/V_t when trading is steady."""
    relaxation_volume, volume, slice_ = 5e4, 1e4, 700.0
    theta = np.full(400, volume / relaxation_volume)
    _, after = imbalance(Ragged(np.array([400])), theta, np.full(400, slice_), np.zeros(1))
    assert after[-1] / relaxation_volume == pytest.approx(slice_ / volume, rel=1e-12)
