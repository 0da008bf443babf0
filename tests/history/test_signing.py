"""Trade signing: a worked tape, the quote rule, and what is left unsigned."""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.history.signing import sign_trades, ticks
from scheduler.model.ragged import Ragged

UNKNOWN = np.nan


def signed(price, middle=None, sizes=None, auction=None):
    count = len(price)
    return sign_trades(
        np.array(price, dtype=float),
        np.full(count, UNKNOWN) if middle is None else np.array(middle, dtype=float),
        Ragged(np.array([count] if sizes is None else sizes)),
        np.zeros(count, np.bool_) if auction is None else np.array(auction, np.bool_),
    )


def test_a_worked_tape():
    """10.00, 10.01, 10.01, 10.00, 10.00, 10.02: the first unsigned, then B, B, S, S, B."""
    found = signed([10.00, 10.01, 10.01, 10.00, 10.00, 10.02])
    assert found.sign.tolist() == [0, 1, 1, -1, -1, 1]
    assert not found.by_quote.any()


def test_the_quote_comes_first():
    """Lee & Ready (1991): above the midpoint a buy, below a sell, whatever the last tick was."""
    price = [10.00, 10.01, 10.00, 10.02, 10.01]
    middle = [9.995, 10.02, 9.99, 10.03, 10.01]
    found = signed(price, middle)
    assert found.sign.tolist() == [1, -1, 1, -1, -1]  # the last at the midpoint: a down-tick
    assert found.by_quote.tolist() == [True, True, True, True, False]


def test_a_midpoint_is_one_in_spite_of_rounding():
    """The mean of 0.1 and 0.7 is not 0.4 in binary."""
    middle = 0.5 * (0.1 + 0.7)
    assert middle != 0.4
    assert signed([0.3, 0.4], [UNKNOWN, middle]).by_quote.tolist() == [False, False]


def test_a_session_begins_anew():
    """A change of price overnight signs nothing."""
    found = signed([10.0, 10.1, 10.2, 10.2, 10.1], sizes=[2, 3])
    assert found.sign.tolist() == [0, 1, 0, 0, -1]


def test_nobody_begins_an_auction():
    """Neither quote nor tick signs it; it counts as unsigned volume."""
    found = signed([10.0, 10.1, 10.3], [9.9, 10.2, 10.0], auction=[False, False, True])
    assert found.sign.tolist() == [1, -1, 0]
    shares = found.shares(np.array([100.0, 300.0, 600.0]))
    assert shares == pytest.approx({"by_quote": 0.4, "by_tick": 0.0, "unsigned": 0.6})


def test_the_tick_rule_equals_a_plain_loop():
    """On a random tape of many equal prices and sessions."""
    rng = np.random.default_rng(1)
    price, sizes = 10.0 + 0.01 * rng.integers(0, 3, 500), [1, 2, 197, 300]
    expected = []
    for part in np.split(price, np.cumsum(sizes)[:-1]):
        last, sign = part[0], 0
        for value in part:
            if value != last:
                sign = 1 if value > last else -1
            expected.append(sign)
            last = value
    assert ticks(price, Ragged(np.array(sizes))).tolist() == expected
