"""Shortfall and its parts: worked examples to the printed digit, mirrored sells, exact sums."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.shortfall.parts import (
    Benchmarks,
    Dealt,
    adjusted,
    paper_less_real,
    split,
)

ONE = np.ones(1)
NOTHING = np.zeros(1)

# Worked examples of a professional curriculum on implementation shortfall [Perold 1988]: decision,
# arrival, fill and end price; shares done of 1,000, fees; parts and total in % as printed.
EXAMPLES = {
    "A": ((10.00, 10.05, 10.07, 10.08), 700, 14, (0.14, 0.35, 0.14, 0.24), 0.87),
    "B": ((40.00, 40.04, 40.05, 40.08), 700, 17, (0.04, 0.07, 0.02, 0.06), 0.19),
    "C": ((60.00, 60.05, 60.07, 60.08), 700, 19, (0.03, 0.06, 0.02, 0.04), 0.15),
}


def dealt(shares: float, price: float, fee: float, market: float = np.nan) -> Dealt:
    values = (np.array([value], dtype=float) for value in (shares, price, fee, market))
    return Dealt(np.zeros(1, dtype=np.int64), *values)


@pytest.mark.parametrize("side", [1.0, -1.0])
@pytest.mark.parametrize("case", EXAMPLES)
def test_worked_examples_to_the_printed_digit(case: str, side: float) -> None:
    """Buys as printed; sells with every price mirrored at the decision price cost the same."""
    prices, shares, fee, printed, total = EXAMPLES[case]
    decision, arrival, price, end = (prices[0] + side * (p - prices[0]) for p in prices)
    marks = Benchmarks(*(np.array([p]) for p in (decision, arrival, end)))
    fills = dealt(shares, price, fee)
    quantity = np.array([1_000.0])
    parts = split(side * ONE, quantity, marks, fills, NOTHING, NOTHING)
    paper = 1_000.0 * prices[0]
    found = [parts.explicit, parts.delay, parts.execution, parts.opportunity]
    assert [round(100.0 * float(part[0]) / paper, 2) for part in found] == list(printed)
    assert round(100.0 * float(parts.total[0]) / paper, 2) == total
    assert parts.total == pytest.approx(paper_less_real(side * ONE, quantity, marks, fills))


def test_the_first_example_in_money() -> None:
    """A: 80 on paper, a loss of 7 in fact: 87."""
    prices, shares, fee, *_ = EXAMPLES["A"]
    marks = Benchmarks(*(np.array([prices[k]]) for k in (0, 1, 3)))
    parts = split(ONE, np.array([1e3]), marks, dealt(shares, prices[2], fee), NOTHING, NOTHING)
    assert float(parts.total[0]) == pytest.approx(87.0)


def test_the_market_adjusted_shortfall_of_the_third() -> None:
    """0.15 % less 1.3 times the market's 0.5 %; of a sell the market's rise is a gain."""
    prices, shares, fee, *_ = EXAMPLES["C"]
    marks = Benchmarks(*(np.array([prices[k]]) for k in (0, 1, 3)))
    parts = split(ONE, np.array([1e3]), marks, dealt(shares, prices[2], fee), NOTHING, NOTHING)
    paper = np.array([60_000.0])
    left = adjusted(parts.total, ONE, paper, 1.3 * ONE, 0.005 * ONE)
    assert round(100.0 * float(left[0]) / 60_000.0, 2) == -0.50
    sold = adjusted(parts.total, -ONE, paper, 1.3 * ONE, 0.005 * ONE)
    assert float(sold[0]) > float(parts.total[0])


@settings(deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_parts_add_up_to_the_total(seed: int) -> None:
    """Any orders and fills, market prices known or not: the sum is paper less real."""
    rng = np.random.default_rng(seed)
    count, fills = int(rng.integers(1, 6)), int(rng.integers(0, 20))
    side = rng.choice([-1.0, 1.0], count)
    base = rng.uniform(1.0, 500.0, count)
    marks = Benchmarks(*(base * rng.uniform(0.9, 1.1, count) for _ in range(3)))
    order = rng.integers(0, count, fills)
    shares = rng.uniform(1.0, 1e4, fills)
    market = np.where(rng.random(fills) < 0.3, np.nan, base[order] * rng.uniform(0.9, 1.1, fills))
    price, fee = base[order] * rng.uniform(0.9, 1.1, fills), rng.uniform(-5.0, 50.0, fills)
    one = Dealt(order, shares, price, fee, market)
    quantity = one.by_order(shares, count) + rng.choice([0.0, 1_234.0], count) + 1.0
    spread, moved = rng.uniform(0.0, 1e4, (2, count))
    parts = split(side, quantity, marks, one, spread, moved)
    total = paper_less_real(side, quantity, marks, one)
    assert np.abs(parts.total - total).max() <= 1e-11 * (quantity * base).max()
    unknown = np.bincount(order, np.isnan(market), minlength=count) > 0
    assert (np.isnan(parts.timing) == unknown).all()


def test_timing_is_the_market_and_the_residual_the_fills() -> None:
    """By hand: 100 at 10.30 while the market stood at 10.20, from 10.00; spread 4, impact 15."""
    marks = Benchmarks(np.array([10.0]), np.array([10.0]), np.array([np.nan]))
    fills = dealt(100.0, 10.30, 0.0, 10.20)
    parts = split(ONE, np.array([100.0]), marks, fills, 4.0 * ONE, 15.0 * ONE)
    assert float(parts.timing[0]) == pytest.approx(20.0 - 15.0)
    assert float(parts.residual[0]) == pytest.approx(10.0 - 4.0)
    assert float(parts.opportunity[0]) == 0.0
