"""Tests of the model on tapes of known truth: values recovered, intervals that cover."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scheduler.history.displacement import FEWEST, Findings, findings, intervals_of, together
from scheduler.history.regression import least_squares
from scheduler.history.tape import Tape, imbalance_along
from tests.tapes import OPEN_SHARE, market_of, played, vars_of

MARKET = market_of()


def intervals(tape: Tape):
    along = imbalance_along(tape, float(MARKET.relaxation_volume[0]))
    return intervals_of(tape, along, MARKET, OPEN_SHARE)


def found(seed: int, **truth) -> Findings:
    result = findings(intervals(played(seed, **truth)), 0.5)
    assert result is not None
    return result


def within(interval, value):
    return interval[0] <= value <= interval[1]


def test_errors_are_those_of_the_formula():
    """The sandwich with Bartlett weights over two lags, computed by hand."""
    rng = np.random.default_rng(1)
    x, y = rng.normal(size=12), rng.normal(size=12)
    slope, _ = least_squares(y, [x, np.ones(12)], np.zeros(12, np.int64))
    expected = np.polyfit(x, y, 1)[0]
    assert slope.value == pytest.approx(expected)
    each = least_squares(y, [x], np.arange(12))[0]
    b = (x @ y) / (x @ x)
    scores = x * (y - b * x)
    lagged = sum((1 - lag / 3) * 2 * (scores[lag:] @ scores[:-lag]) for lag in (1, 2))
    assert each.error == pytest.approx(np.sqrt(12 / 11 * (scores @ scores + lagged)) / (x @ x))


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_the_fading_share_is_recovered(share):
    """From a long tape, within its interval; the weight is s^2 at delta = 1/2."""
    result = found(11, share=share, sessions=60)
    assert within(result.share_interval, share)
    assert result.share_interval[1] - result.share_interval[0] < 0.6
    assert result.weight == pytest.approx(min(max(result.share, 0.0), 1.0) ** 2)
    assert result.weight_interval[0] <= result.weight <= result.weight_interval[1]


def test_persistent_flow_gives_no_weight():
    """Where prices go on instead of back the share is negative and the weight 0."""
    result = found(12, share=-0.8, sessions=30)
    assert result.share_interval[1] < 0.0
    assert result.weight == 0.0
    assert result.weight_interval == (0.0, 0.0)


def test_variance_that_grows_with_imbalance_is_seen_and_where_it_does_not_it_is_not():
    linked, not_linked = (found(13, link=link, sessions=60).variance for link in (0.8, 0.0))
    assert within(linked.interval, 0.8)
    assert linked.p < 0.01
    assert within(not_linked.interval, 0.0)


def test_displacement_grows_with_the_root_of_imbalance():
    """Clearly above 0, below 1: what the last L gave back is missing from its return."""
    result = found(14, sessions=30)
    assert result.displacement.p < 1e-6
    assert 0.5 < result.displacement.value < 1.0


def test_too_short_a_tape_gives_nothing():
    assert findings(intervals(played(1, sessions=3)), 0.5) is None
    assert len(intervals(played(1, sessions=3))) < FEWEST


@pytest.mark.parametrize("stands", ["reading", "last"])
def test_a_tape_that_does_not_move_gives_nothing(stands):
    """Least squares on it would call a weight of nought exact."""
    moving = intervals(played(1))
    nought = np.zeros(len(moving))
    still = {"reading": {"reading": nought, "shape": nought}, "last": {"last": nought}}
    assert findings(moving, 0.5) is not None
    assert findings(replace(moving, **still[stands]), 0.5) is None
    one_way = replace(moving, reading=np.full(len(moving), 0.7), shape=np.full(len(moving), 0.8))
    assert findings(one_way, 0.5) is None


def test_symbols_together_are_as_many_intervals():
    """Sessions are told apart by symbol; twice the same data have the same slope."""
    one = intervals(played(15))
    both = together([one, one])
    assert len(both) == 2 * len(one)
    assert len(np.unique(both.day)) == 2 * len(np.unique(one.day))
    single, double = findings(one, 0.5), findings(both, 0.5)
    assert double.share == pytest.approx(single.share)
    # errors of one time go together: data seen twice are no surer
    assert double.given_back.error == pytest.approx(single.given_back.error, rel=0.02)


def test_prices_in_another_unit_change_nothing():
    tape = played(16)
    scaled = Tape(**{**vars_of(tape), "price": 7 * tape.price, "middle": 7 * tape.middle})
    first, second = (findings(intervals(each), 0.5) for each in (tape, scaled))
    assert second.share == pytest.approx(first.share, rel=1e-9)
    assert second.variance.value == pytest.approx(first.variance.value, rel=1e-9)


def test_moves_overnight_do_not_count():
    tape = played(17)
    jump = 1.0 + 0.05 * (tape.session - tape.session[0])
    jumped = Tape(**{**vars_of(tape), "price": tape.price * jump, "middle": tape.middle * jump})
    first, second = (findings(intervals(each), 0.5) for each in (tape, jumped))
    assert second.share == pytest.approx(first.share, rel=1e-9)


def _coverage(count: int) -> tuple[float, float]:
    shares, links = [], []
    for seed in range(count):
        shares.append(within(found(seed, share=0.5, sessions=12).share_interval, 0.5))
        links.append(within(found(seed, link=0.5, sessions=12).variance.interval, 0.5))
    return float(np.mean(shares)), float(np.mean(links))


def test_intervals_cover_the_truth():
    """95 % intervals of 40 short tapes: at least 83 % (chance of fewer, were they right: 0.3 %)."""
    assert min(_coverage(40)) >= 0.83


@pytest.mark.slow
def test_intervals_cover_as_often_as_they_say():
    """Of 200 short tapes."""
    assert all(0.91 <= part <= 0.98 for part in _coverage(200))
