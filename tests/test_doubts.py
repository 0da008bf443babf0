"""`plan` with `uncertainty` and `worst_of`: ranges over draws, and the robust choice."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler import InputError, MisuseError, Plan, plan
from scheduler.figures import Figures
from scheduler.model.laws import IMPACT_LAWS
from scheduler.rivals import under_law
from scheduler.solve.schedule import schedule
from scheduler.tables.estimates import Estimate, Estimates, read_estimates
from scheduler.worlds import SEED, draw_worlds, drawn
from tests.desk import DAY, name, planned, random_desk, row_of, table, task

LAWS = ("imbalance", "rate-power", "root-lasting")


def estimates(**rows: tuple[float, float, float]) -> dict[str, Any]:
    """value, low, high by name; `__` stands for the colon before a symbol."""
    return {
        "settings": {
            key.replace("__", ":"): {"value": value, "interval": [low, high]}
            for key, (value, low, high) in rows.items()
        }
    }


KNOWN = estimates(relaxation=(0.05, 0.02, 0.1), impact_exponent=(0.5, 0.42, 0.58))


def robust(quantity: float = 100_000, **options: Any) -> Plan:
    return planned(task(quantity), name(), **{"urgency": 0.3, "worst_of": LAWS} | options)


# the robust choice


@given(seed=st.integers(0, 10_000))
@settings(max_examples=8, deadline=None)
def test_worst_regret_is_never_above_the_plain_schedules(seed):
    """In whole lots, as reported; and a robust schedule is chosen only where it is below."""
    orders, market = random_desk(seed)
    result = planned(orders, market, urgency=0.2, worst_of=LAWS)
    for row in result.summary["orders"].values():
        worst = row["worst_of"]
        assert worst["worst_regret_bps"] <= worst["plain_worst_regret_bps"]
        if worst["schedule"] == "robust":
            assert worst["worst_regret_bps"] < worst["plain_worst_regret_bps"]
        assert worst["gap"] <= 1e-4
        assert min(worst["regret_bps"].values()) >= 0.0


def test_regret_is_what_it_says():
    """Recomputed from the schedule: C + lambda Var less its least under each law."""
    result = robust()
    worst = row_of(result)["worst_of"]
    price = worst["risk_aversion"]
    for law in LAWS:
        own = result.book.arrays if law == "imbalance" else under_law(result.book, law)
        own = own.asking(np.zeros(1), np.array([price]))
        best = schedule(own).shares
        values = [
            float(f.expected_cost[0] + price * f.cost_std[0] ** 2)
            for f in (Figures(own, result.book.charges, s) for s in (result.figures.shares, best))
        ]
        told = worst["regret_bps"][law] * result.figures.notional[0] / 1e4
        assert told == pytest.approx(values[0] - values[1], abs=1e-6 * values[1])


def test_the_worst_laws_are_level_and_far_below_the_plain_schedules_worst():
    """At the least worst regret at least two laws have it; here it is less than half."""
    worst = row_of(robust())["worst_of"]
    ranked = sorted(worst["regret_bps"].values())
    assert worst["schedule"] == "robust"
    assert ranked[-2] == pytest.approx(ranked[-1], rel=0.02)  # whole lots
    assert worst["worst_regret_bps"] < 0.5 * worst["plain_worst_regret_bps"]


def test_one_law_the_plans_own_leaves_the_plan_as_it_is():
    one, plain = robust(worst_of="imbalance"), robust(worst_of=())
    assert one.schedule.equals(plain.schedule)
    assert row_of(one)["worst_of"]["schedule"] == "plain"


def test_one_law_another_gives_that_laws_plan():
    """At the plain plan's lambda, to whole lots."""
    one = robust(worst_of="root-lasting")
    price = row_of(one)["worst_of"]["risk_aversion"]
    other = planned(task(100_000), name(), impact_law="root-lasting", risk_aversion=price)
    assert np.abs(one.figures.shares - other.figures.shares).max() <= 100.0


def test_the_order_of_laws_does_not_matter():
    one, other = robust(), robust(worst_of=LAWS[::-1])
    assert np.abs(one.figures.shares - other.figures.shares).max() <= 20.0


def test_more_laws_have_no_lesser_worst_regret():
    few = row_of(robust(worst_of=LAWS[:2]))["worst_of"]["worst_regret_bps"]
    assert few < row_of(robust(worst_of=tuple(IMPACT_LAWS)))["worst_of"]["worst_regret_bps"]


def test_the_schedule_keeps_quantity_caps_and_finish():
    result = robust(finish=["0.6@12:00"], max_participation=0.2)
    figures, arrays = result.figures, result.book.arrays
    assert figures.traded[0] == 100_000
    assert (figures.shares <= arrays.cap + 1.0).all()
    done = result.schedule[result.schedule["end"].str[11:16] <= "12:00"]["shares"].sum()
    assert done >= 60_000


def test_the_certificate_is_of_the_robust_choice():
    """Proven, and lambda is the one that the regrets are weighed at."""
    row = row_of(robust())
    assert row["certificate"]["status"] == "proven"
    assert row["certificate"]["gap"] < 1e-6
    assert row["risk_aversion"] == row["worst_of"]["risk_aversion"]


def test_an_order_without_a_choice_has_no_regret():
    """All caps used up, and a part left undone."""
    order = task(900_000, must_complete=False)
    row = row_of(planned(order, name(), max_participation=0.1, worst_of=LAWS))
    assert row["residual"] > 0.0
    assert row["worst_of"]["worst_regret_bps"] == pytest.approx(0.0, abs=1e-3)
    assert row["worst_of"]["schedule"] == "plain"


def test_draws_can_be_the_worlds():
    """Least worst regret over the draws, beside the plain schedule's."""
    worst = row_of(robust(worst_of="draws", uncertainty=KNOWN))["worst_of"]
    assert len(worst["regret_bps"]) == 32
    assert worst["schedule"] == "robust"
    assert worst["worst_regret_bps"] < worst["plain_worst_regret_bps"]


# draws


def test_certainty_has_no_range():
    """Intervals of no width around the plan's own parameters: its own figures, nothing moves."""
    sure = estimates(relaxation=(0.05, 0.05, 0.05), daily_vol__OAKMERE=(0.02, 0.02, 0.02))
    result = planned(task(), name(), uncertainty=sure)
    row = row_of(result)
    told = row["uncertainty"]
    for figure in ("expected_cost_bps", "cost_std_bps"):
        assert told[figure]["least"] == pytest.approx(told[figure]["most"], rel=1e-12)
        assert told[figure]["middle"] == pytest.approx(row[figure], rel=1e-12)
    assert told["regret_bps"]["most"] < 1e-3
    assert told["moves"]["high"] < 1e-3


def test_wider_intervals_give_wider_ranges_and_more_regret():
    """Twice as wide in the logarithm."""
    told = [
        row_of(planned(task(), name(), uncertainty=estimates(relaxation=(0.05, low, high))))
        for low, high in ((0.04, 0.0625), (0.032, 0.078125))
    ]
    spans = [t["uncertainty"]["expected_cost_bps"] for t in told]
    narrow, wide = (span["high"] - span["low"] for span in spans)
    assert 1.7 * narrow < wide < 2.5 * narrow
    regrets, moves = (
        [t["uncertainty"][key]["high"] for t in told] for key in ("regret_bps", "moves")
    )
    assert regrets[1] > 2.0 * regrets[0]
    assert moves[1] > 1.5 * moves[0]


def test_volatility_scales_cost_and_risk():
    """Impact and risk are proportional to it, so its 5 and 95 % points are theirs."""
    sure = estimates(daily_vol__OAKMERE=(0.02, 0.015, 0.03))
    row = row_of(planned(task(), name(), uncertainty=sure))
    vol = drawn(read_estimates(sure), 32, SEED)[:, 0]
    for figure in ("expected_cost_bps", "cost_std_bps"):
        expected = row[figure] * np.quantile(vol, 0.95) / 0.02
        assert row["uncertainty"][figure]["high"] == pytest.approx(expected, rel=1e-9)


def test_estimates_of_other_symbols_change_nothing():
    row = row_of(planned(task(), name(), uncertainty=estimates(adv__ELSEWHERE=(1e6, 1e5, 1e7))))
    assert row["uncertainty"]["regret_bps"]["most"] < 1e-3


def test_the_total_adds_up_draw_by_draw():
    """Two alike orders: the same relative range; their risk together is not known."""
    orders = [task(), task(symbol="MILL")]
    result = planned(orders, [name(), name("MILL")], uncertainty=KNOWN)
    total, one = result.summary["total"]["uncertainty"], row_of(result)["uncertainty"]
    assert total["expected_cost_bps"]["high"] == pytest.approx(one["expected_cost_bps"]["high"])
    assert "cost_std_bps" not in total
    assert result.summary["inputs"]["uncertainty"] == "uncertainty"


def test_the_same_plan_twice():
    assert (
        row_of(planned(task(), name(), uncertainty=KNOWN))["uncertainty"]
        == (row_of(planned(task(), name(), uncertainty=KNOWN))["uncertainty"])
    )


def test_draws_follow_the_interval():
    """Median and ends of the law; a Latin hypercube; within the permitted range; seeded."""
    items = (
        Estimate("relaxation", None, 0.05, 0.02, 0.06),
        Estimate("reading_weight", None, 0.9, 0.5, 1.4),
    )
    found = drawn(Estimates(items, (), "x"), 4_000, seed=7)
    assert np.quantile(found[:, 0], [0.025, 0.5, 0.975]) == pytest.approx(
        [0.02, 0.05, 0.06], rel=2e-3
    )
    assert found[:, 1].max() == 1.0
    assert np.mean(found[:, 1] < 0.9) == 0.5
    assert abs(np.corrcoef(found.T)[0, 1]) < 0.05
    assert np.array_equal(found, drawn(Estimates(items, (), "x"), 4_000, seed=7))
    assert not np.array_equal(found, drawn(Estimates(items, (), "x"), 4_000, seed=8))


def test_a_draw_is_the_plan_of_those_parameters():
    """Level rate, weight, law and market as if the settings and tables had them."""
    values = {"level_rate": 0.4, "reading_weight": 0.5, "impact_exponent": 0.6}
    readings = table({"symbol": "OAKMERE", "imbalance": 0.4})
    sure = estimates(**{key: (v, v, v) for key, v in values.items()}, adv__OAKMERE=(8e5, 8e5, 8e5))
    base = planned(task(), name(), readings=readings)
    other = planned(task(), name(adv=8e5), readings=readings, **values)
    world = draw_worlds(base.book, read_estimates(sure), count=1)["draw 1"]
    for field, value in vars(other.book.arrays.market).items():
        assert np.allclose(getattr(world.market, field), value), field
    assert np.allclose(world.stages.theta, other.book.arrays.stages.theta)
    # the reading's shares are what they were on the plan's own volume
    assert np.allclose(world.initial, 0.5 * base.book.arrays.initial)


def test_a_reading_that_is_not_believed_is_said():
    readings = table({"symbol": "OAKMERE", "imbalance": 0.4})
    sure = estimates(reading_weight=(0.5, 0.2, 0.8))
    result = planned(task(), name(), readings=readings, reading_weight=0.0, uncertainty=sure)
    assert "reading_weight is 0 in the settings, so its estimate changes nothing" in result.notes


# refusals


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"worst_of": "imbalance,square"}, "worst_of square: known are imbalance, rate-power"),
        ({"worst_of": "draws"}, "worst_of draws needs estimates to draw from"),
        ({"worst_of": LAWS, "risk_budget": 50.0}, "keeps no risk_budget"),
        ({"worst_of": LAWS, "cost_budget": 50.0}, "keeps no cost_budget"),
    ],
)
def test_misuse(options, words):
    with pytest.raises(MisuseError, match=words):
        planned(task(), name(), **options)


@pytest.mark.parametrize("asked", [{"worst_of": LAWS}, {"uncertainty": KNOWN}])
def test_orders_that_are_not_alone_are_refused(asked):
    """Of one symbol, or one list."""
    twins = [task(order_id="a"), task(order_id="b")]
    with pytest.raises(MisuseError, match="some share a symbol"):
        planned(twins, name(), **asked)
    corridors = table({"kind": "cash", "lower": "", "upper": "1e9"})
    with pytest.raises(MisuseError, match="not for a list"):
        planned(task(), name(), corridors=corridors, **asked)


def test_min_slice_and_constraints_are_refused():
    with pytest.raises(MisuseError, match="worst_of keeps no min_slice"):
        planned(task(min_slice=500), name(), worst_of=LAWS)
    row = {"name": "one", "order_id": "OAKMERE-1", "bucket": 1, "coefficient": 1, "upper": 500}
    with pytest.raises(MisuseError, match="worst_of keeps no constraints"):
        planned(task(), name(), solver="conic", constraints=table(row), worst_of=LAWS)


def test_estimates_that_cannot_be_used_are_refused():
    with pytest.raises(InputError, match="there is no such file"):
        plan(table(task()), table(name()), date=DAY, at="09:30", uncertainty="nowhere.json")


def test_asking_for_ranges_leaves_the_schedule_alone():
    plain, asked = planned(task(), name()), planned(task(), name(), uncertainty=KNOWN)
    assert asked.schedule.equals(plain.schedule)
