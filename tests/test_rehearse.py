"""Plans played forward: as forecast the promise is kept; at random volumes and caps decide."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy.stats import kstest

from scheduler import MisuseError, Plan
from scheduler.figures import Charges, Figures
from scheduler.model.mixture import CostDistribution
from scheduler.paths import Noise, Played, fills, in_volume, play, volume_factors
from scheduler.rehearse import AS_FORECAST, AT_RANDOM, THE_LIST, outcome, rehearse
from tests.builders import order
from tests.desk import name, planned, task
from tests.listed import RISK, TIES, listed, rows
from tests.model.direct import stage_costs

FEW = 4_000


def two_days() -> Plan:
    """An order over two sessions with a night between."""
    window = {"start": "2026-03-05T14:00", "end": "2026-03-06T11:00"}
    return planned(task(80_000, **window), name(), urgency=0.1, bucket=30.0)


def leaning() -> Plan:
    """An order that a reading leans against, so that Z changes sign."""
    readings = pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": [-0.4]})
    return planned(task(40_000), name(), readings=readings, urgency=0.1, bucket=30.0)


def shared() -> Plan:
    orders = [task(30_000, order_id="A"), task(9_000, order_id="B", start="13:00")]
    return planned(orders, name(), urgency=0.1, bucket=30.0)


def split_list() -> Plan:
    whole, *others = rows()
    parts = [whole | {"order_id": key, "quantity": 20_000} for key in ("a", "b")]
    return listed([*parts, *others], corridors=TIES, **RISK)


PLANS = {
    "one order": lambda: planned(task(60_000), name(spread_bps=4), urgency=0.3, bucket=30.0),
    "two sessions": two_days,
    "a reading": leaning,
    "a shared state": shared,
    "a list": lambda: listed(corridors=TIES, **RISK),
    "a list with a shared state": split_list,
}


@pytest.mark.parametrize("case", PLANS)
def test_with_the_volume_as_forecast_the_promise_is_kept(case: str) -> None:
    """Kolmogorov and Smirnov's test (scipy) of the costs against the plan's own mixture."""
    result = rehearse(PLANS[case](), paths=FEW, session_noise=0.0, bucket_noise=0.0)
    for label, law in result.promised.items():
        cost = result.played[AS_FORECAST][label].cost

        def cdf(values: np.ndarray, law: CostDistribution = law) -> np.ndarray:
            return np.array([law.cdf(np.array([value]))[0] for value in np.atleast_1d(values)])

        assert kstest(cost[:1000], cdf).pvalue > 1e-3
        figures = result.summary["orders"][label][AS_FORECAST]
        assert abs(figures["mean"] - law.mean[0]) < 4.0 * figures["mean_error"]
        assert abs(figures["std"] - law.std[0]) < 4.5 * figures["std_error"]
        assert figures["verdict"].startswith("as promised")
        assert figures["completed"] == 1.0


def test_what_is_promised_is_what_the_plan_says() -> None:
    plan = PLANS["one order"]()
    promised = rehearse(plan, paths=10).summary["orders"]["OAKMERE-1"]["promised"]
    row = plan.summary["orders"]["OAKMERE-1"]
    assert promised["mean"] == pytest.approx(row["expected_cost"])
    assert promised["std"] == pytest.approx(row["cost_std"])
    assert promised["quantiles"] == pytest.approx(row["quantiles"])
    tied = listed(corridors=TIES, **RISK)
    total, law = tied.summary["total"], rehearse(tied, paths=10).summary["orders"][THE_LIST]
    assert law["promised"]["quantiles"] == pytest.approx(total["quantiles"])


def test_the_cost_of_a_path_is_that_of_its_volumes_by_direct_integration() -> None:
    """One path's fills and volumes, priced by a differential equation solver."""
    orders = order([0.1] * 10, quantity=5e4, participation=0.25)
    shares = np.full(10, 5e3)
    rng = np.random.default_rng(3)
    moved = in_volume(orders, volume_factors(orders.stages, Noise(0.5, 0.5), rng))
    filled = fills(moved, shares, None)
    assert (filled <= moved.cap).all()

    nothing = Charges(np.zeros(10), np.zeros(10))
    figures = Figures(moved, nothing, filled)
    assert figures.impact[0] == pytest.approx(stage_costs(moved, filled).sum(), rel=1e-6)


def test_what_a_cap_cuts_off_waits() -> None:
    """By hand: 4 a bucket at most; the third bucket has no volume."""
    orders = order([0.1, 0.1, 0.0, 0.1, 0.1], quantity=14.0, cap=[4.0, 4.0, 0.0, 4.0, 4.0])
    shares = np.array([6.0, 1.0, 0.0, 7.0, 0.0])
    assert fills(orders, shares, None).tolist() == [4.0, 3.0, 0.0, 4.0, 3.0]
    late = np.array([0.0, 0.0, 0.0, 7.0, 7.0])
    assert fills(orders, late, None).tolist() == [0.0, 0.0, 0.0, 4.0, 4.0]


@pytest.mark.parametrize(("factor", "done"), [(0.5, 0.5), (1.0, 1.0), (2.0, 1.0)])
def test_slices_that_follow_the_volume_keep_their_part_of_it(factor: float, done: float) -> None:
    """At half the volume half is left; at twice the volume it is done by half time."""
    orders = order([0.1] * 10, quantity=1e4)
    shares = np.full(10, 1e3)
    filled = fills(orders, shares, np.full(10, factor))
    assert filled.sum() == pytest.approx(1e4 * done)
    if factor == 2.0:
        assert np.flatnonzero(filled).max() == 4


def test_volumes_at_random_have_the_forecast_as_their_mean() -> None:
    orders = order([0.1] * 10, is_open=[True] * 9 + [False]).take(np.zeros(4_000, dtype=np.int64))
    factor = volume_factors(orders.stages, Noise(0.3, 0.4), np.random.default_rng(1))
    by_order = factor.reshape(4_000, 10)
    assert (by_order[:, 9] == 1.0).all()
    assert by_order[:, :9].mean() == pytest.approx(1.0, abs=0.02)
    log = np.log(by_order[:, :9])
    assert log.std(axis=1, ddof=1).mean() == pytest.approx(0.4, rel=0.05)
    assert log.mean(axis=1).std() == pytest.approx(np.hypot(0.3, 0.4 / 3.0), rel=0.05)
    together = volume_factors(
        orders.stages, Noise(0.3, 0.0), np.random.default_rng(1), together=True
    )
    assert np.unique(together[orders.stages.open].round(12)).size == 1


def test_volume_at_random_costs_more_and_may_leave_shares() -> None:
    """A concave price of imbalance: what thin volume costs, thick volume does not give back."""
    plan = planned(task(140_000), name(), urgency=0.3, bucket=30.0)
    figures = rehearse(plan, paths=FEW, session_noise=0.6, bucket_noise=0.5).summary["orders"]
    noisy = figures["OAKMERE-1"][AT_RANDOM]
    promised = figures["OAKMERE-1"]["promised"]
    assert noisy["completed"] < 0.95
    assert noisy["residual"] > 0.0
    assert noisy["residual_cost"] > 0.0
    assert noisy["std"] > promised["std"]
    assert "not as promised" in noisy["verdict"]


def test_the_same_seed_gives_the_same_paths() -> None:
    plan = shared()
    one, two, other = (rehearse(plan, paths=50, seed=seed).paths for seed in (7, 7, 8))
    pd.testing.assert_frame_equal(one, two)
    assert not one["cost"].equals(other["cost"])
    assert one.groupby(["case", "order_id"]).size().tolist() == [50, 50]


def test_batches_are_paths_of_one_run(monkeypatch: pytest.MonkeyPatch) -> None:
    """However few at once: all are there, and progress counts them."""
    plan = PLANS["one order"]()
    monkeypatch.setattr("scheduler.paths._ENTRIES", 100)
    told: list[int] = []
    rng = np.random.default_rng(1)
    played = play(plan.figures, 0, Noise(0.3, 0.3), 20, rng, told=told.append)
    assert len(played.cost) == 20
    assert told[-1] == 20
    assert told[:2] == [6, 12]


def test_a_false_promise_is_found_out() -> None:
    """Costs a tenth of a standard deviation dearer, or a tenth wider, than promised."""
    rng = np.random.default_rng(1)
    law = CostDistribution(np.zeros(1), np.ones((1, 1)), np.zeros((1, 1)), np.zeros(1))
    none = np.zeros(20_000)
    true = Played(rng.standard_normal(20_000), none, none, none, none.astype(np.int64))
    assert outcome(true, law)["verdict"].startswith("as promised")
    dearer = outcome(replace(true, cost=true.cost + 0.1), law)
    assert "the mean is 8.9% of" in dearer["verdict"]  # 10 % less what chance took off
    assert "dearer" in dearer["verdict"]
    wider = outcome(replace(true, cost=true.cost * 1.1), law)["verdict"]
    assert "larger" in wider


@pytest.mark.parametrize(
    ("options", "what"),
    [
        ({"paths": 1}, "paths must be from 2"),
        ({"paths": 10**9}, "paths must be from 2"),
        ({"seed": -1}, "seed must not be negative"),
        ({"session_noise": -0.1}, "session_noise must be from 0 to 3"),
        ({"bucket_noise": float("nan")}, "bucket_noise must be from 0 to 3"),
    ],
)
def test_numbers_out_of_range_are_refused(options: dict[str, float], what: str) -> None:
    with pytest.raises(MisuseError, match=what):
        rehearse(PLANS["one order"](), **options)
