"""The rest of a plan: reproduced where nothing changed, moved the right way where something did."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest

from scheduler import Plan, Settings, replan
from scheduler.model.state import imbalance
from scheduler.paths import Noise, fills, in_volume, volume_factors
from scheduler.replan import Replan
from scheduler.rest.progress import band
from tests.desk import name, planned, row_of, settings_of, slices, table, task
from tests.filled import on_plan
from tests.listed import RISK, TIES, listed

MIDDAY = "2026-03-05T12:00:00-05:00"


def one(**options: Any) -> Plan:
    return planned(
        task(120_000), name(spread_bps=4), **({"urgency": 0.3, "bucket": 30.0} | options)
    )


def leaning() -> Plan:
    readings = pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": [0.5]})
    return one(readings=readings)


def two_days() -> Plan:
    window = {"start": "2026-03-05T14:00", "end": "2026-03-06T11:00"}
    return planned(
        task(80_000, **window), name(), urgency=0.2, bucket=30.0, overnight_relaxation=0.01
    )


PLANS: dict[str, Callable[[], Plan]] = {
    "an order": one,
    "a sell of few shares": lambda: one(urgency=1.0),
    "a reading": leaning,
    "two sessions": two_days,
    "no feedback": lambda: one(feedback=0.0),
    "a lasting law": lambda: one(impact_law="root-lasting"),
    "a law of the rate": lambda: one(impact_law="rate-power"),
    "something to finish by": lambda: one(finish=["0.8@13:00"]),
    "a risk budget": lambda: planned(task(120_000), name(), risk_budget=85.0, bucket=30.0),
}


def edges(plan: Plan) -> list[pd.Timestamp]:
    """The end of each continuous bucket but the last, each once."""
    continuous = plan.schedule[plan.schedule["kind"] == "continuous"]
    return [pd.Timestamp(text) for text in continuous["end"].unique()[:-1]]


def still_planned(plan: Plan, at: pd.Timestamp) -> pd.DataFrame:
    return plan.schedule[plan.schedule["start"].map(pd.Timestamp) >= at]


def apart(plan: Plan, result: Replan, at: pd.Timestamp) -> float:
    """The largest difference of a symbol's shares in a bucket between the plan and its rest."""
    assert result.plan is not None
    both = pd.concat(
        [still_planned(plan, at), result.plan.schedule.assign(shares=lambda t: -t.shares)]
    )
    totals = both.groupby(["symbol", "start", "kind"])["shares"].sum()
    assert len(totals) >= len(result.plan.schedule["start"].unique())
    return float(totals.abs().max())


@pytest.mark.parametrize("kind", PLANS)
def test_fills_as_planned_reproduce_the_rest_at_every_bucket(kind: str) -> None:
    """The principle of optimality at the implied risk aversion: to a share or two of rounding."""
    plan = PLANS[kind]()
    for at in edges(plan):
        result = replan(plan, on_plan(plan, at), at=at.isoformat())
        if result.plan is None:
            assert still_planned(plan, at)["shares"].sum() == 0
            continue
        assert apart(plan, result, at) <= 3.0
        row = result.progress.iloc[0]
        assert row["done"] == pytest.approx(row["planned"])
        assert row["verdict"] == "on plan"


def test_in_lots_it_is_to_a_lot() -> None:
    plan = planned(task(120_000), name(lot_size=100), urgency=0.3, bucket=30.0)
    for at in edges(plan):
        assert apart(plan, replan(plan, on_plan(plan, at), at=at.isoformat()), at) <= 100.0


def test_orders_of_one_symbol_and_a_list() -> None:
    """Totals of a symbol; a list with factor risk and corridors, in amounts and in percent."""
    orders = [task(60_000, order_id="a", end="14:00"), task(30_000, order_id="b", start="10:30")]
    shared = planned(orders, name(), urgency=0.3, bucket=30.0)
    corridors = pd.DataFrame(
        {
            "kind": ["net", "gross"],
            "lower": ["-60%", ""],
            "upper": ["60%", "80%"],
            "from": ["", "12:00"],
        }
    )
    tied = listed(corridors=corridors, **RISK)
    cash = listed(corridors=TIES, **RISK)
    for plan in (shared, tied, cash):
        for text in ("11:00", "13:30"):
            at = pd.Timestamp(f"2026-03-05T{text}:00-05:00")
            result = replan(plan, on_plan(plan, at), at=at.isoformat())
            assert apart(plan, result, at) <= 1e-3 * plan.summary["total"]["notional"] / 50.0


def test_a_list_with_a_history_of_returns_keeps_its_factors() -> None:
    """When one name is done the risk of the others is what it was, not estimated anew."""
    rng = np.random.default_rng(3)
    common = rng.normal(0.0, 0.015, (90, 1))
    history = pd.DataFrame(
        common * [1.2, 0.8, 1.0] + rng.normal(0.0, 0.01, (90, 3)), columns=["OAK", "ELM", "ASH"]
    )
    history.insert(0, "date", pd.bdate_range(end="2026-03-04", periods=90).strftime("%Y-%m-%d"))
    orders = [
        task(40_000, symbol="OAK"),
        task(30_000, symbol="ELM", side="sell"),
        task(9_000, symbol="ASH", end="11:00"),
    ]
    market = [name(symbol) for symbol in ("OAK", "ELM", "ASH")]
    plan = planned(orders, market, returns=history, urgency=0.5, bucket=30.0)
    at = pd.Timestamp(MIDDAY)
    result = replan(plan, on_plan(plan, at), at=MIDDAY)
    assert result.plan is not None
    assert result.plan.book.names == ["OAK-1", "ELM-1"]
    assert apart(plan, result, at) <= 3.0
    before, now = (each.transition for each in (plan, result.plan))
    assert before is not None
    assert now is not None
    assert before.risk is not None
    assert now.risk is not None
    assert now.risk.specific == pytest.approx(before.risk.specific[:2])


def test_between_two_edges_the_rest_begins_at_once() -> None:
    plan = one()
    result = replan(plan, on_plan(plan, MIDDAY), at="12:10")
    assert result.plan is not None
    first = slices(result.plan).iloc[0]
    assert (first["start"][11:16], first["end"][11:16]) == ("12:10", "12:30")


# one change at a time


def next_hour(result: Replan) -> float:
    return float(result.attribution.iloc[-1]["next_hour"])


def replanned(plan: Plan, fraction: float = 1.0, **options: Any) -> Replan:
    """The rest at midday, with that fraction of each fill as planned."""
    done = on_plan(plan, MIDDAY)
    done["quantity"] = np.floor(done["quantity"] * fraction)
    return replan(plan, done[done["quantity"] > 0], at=MIDDAY, **options)


def test_behind_is_more_now_and_ahead_is_less() -> None:
    plan = one()
    slow, on, fast = (next_hour(replanned(plan, part)) for part in (0.7, 1.0, 1.05))
    assert slow > on > fast


def test_imbalance_against_us_is_slower_and_for_us_faster() -> None:
    plan = one()
    base = next_hour(replanned(plan))
    dear, cheap = (
        next_hour(
            replanned(plan, readings=pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": [lean]}))
        )
        for lean in (0.5, -0.5)
    )
    assert dear < base < cheap


@pytest.mark.parametrize("law", ["imbalance", "rate-power", "root-lasting"])
def test_more_volatility_is_faster(law: str) -> None:
    """Impact grows with it, and the price of risk with its square."""
    plan = one(impact_law=law)
    base = next_hour(replanned(plan))
    wild = replanned(plan, market=table(name(spread_bps=4, daily_vol=0.03)))
    assert next_hour(wild) > base


def test_a_lower_cap_is_later_and_a_later_end_slower() -> None:
    plan = planned(task(120_000, end="14:00"), name(), urgency=0.3, bucket=30.0)
    base = next_hour(replanned(plan, 0.7))
    capped = table(task(120_000, end="14:00", max_participation=0.2))
    assert next_hour(replanned(plan, 0.7, orders=capped)) < base
    assert next_hour(replanned(plan, 0.7, orders=table(task(120_000)))) < base


def test_a_larger_order_is_more_now() -> None:
    plan = one()
    assert next_hour(replanned(plan, orders=table(task(150_000)))) > next_hour(replanned(plan))


def test_a_higher_urgency_replaces_the_risk_aversion() -> None:
    plan = one()
    hurried = replanned(plan, settings=settings_of(urgency=1.0, bucket=30.0))
    assert hurried.plan is not None
    assert row_of(hurried.plan)["urgency"] == 1.0
    assert next_hour(hurried) > next_hour(replanned(plan))


def test_thin_volume_so_far_makes_the_rest_expect_less() -> None:
    """Bars with half the volume: by less than half, since some of that is chance; and slower."""
    plan = one()
    expected = slices(plan)
    before = expected[expected["end"] <= MIDDAY]
    total = (before["expected_volume"] * 0.5 + before["shares"]).groupby(before["start"]).sum()
    bars = pd.DataFrame({"symbol": "OAKMERE", "time": total.index, "volume": total.to_numpy()})
    bars = bars.assign(open=50.0, high=50.0, low=50.0, close=50.0)
    result = replanned(plan, bars=bars)
    assert result.plan is not None
    later = slices(result.plan)
    ratio = (
        later["expected_volume"]
        / still_planned(plan, pd.Timestamp(MIDDAY))["expected_volume"].to_numpy()
    )
    weight = 0.3**2 / (0.3**2 + 0.4**2 / len(before))
    assert ratio.to_numpy() == pytest.approx(0.5**weight, rel=1e-3)
    assert "volume so far" in set(result.attribution["change"])
    assert next_hour(result) < next_hour(replanned(plan))


# what adds up


def test_attribution_adds_up() -> None:
    plan = one()
    result = replanned(
        plan,
        0.8,
        readings=pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": [0.3]}),
        market=table(name(price=50.4, spread_bps=4, daily_vol=0.025)),
        orders=table(task(130_000)),
        settings=settings_of(urgency=0.5, bucket=30.0),
    )
    changes = result.attribution
    assert changes["change"].tolist() == [
        "as planned",
        "fills",
        "readings",
        "market",
        "orders and limits",
        "settings",
        "now",
    ]
    for column in ("left", "next_hour", "expected_cost", "bps"):
        values = changes[column].to_numpy()
        assert values[:-1].sum() == pytest.approx(values[-1], rel=1e-12)
    assert changes["expected_cost"].iloc[0] == pytest.approx(row_of(plan)["expected_cost"])
    assert changes["left"].iloc[-1] == 130_000 - result.progress["done"].iloc[0]


def test_what_cannot_hold_alone_is_explained_together() -> None:
    """Far behind, the old cap leaves no schedule; with the new one there is."""
    plan = planned(task(200_000), name(), urgency=0.3, bucket=30.0)
    result = replanned(plan, 0.1, orders=table(task(200_000, max_participation=0.5)))
    changes = result.attribution["change"].tolist()
    assert changes == ["as planned", "fills and orders and limits", "now"]


def test_the_cost_of_the_whole_is_kept() -> None:
    """Fills at the prices of the model, each bucket's own: done and to come add up to the plan."""
    plan = one()
    expected = slices(plan)
    price = 50.0 + expected["expected_cost"] / expected["shares"].where(expected["shares"] > 0, 1.0)
    for at in edges(plan):
        done = on_plan(plan, at)
        stamp = done["time"].map(pd.Timestamp)
        ends = expected["end"].map(pd.Timestamp)
        bucket = [int(np.flatnonzero((ends >= moment).to_numpy())[0]) for moment in stamp]
        done["price"] = price.to_numpy()[bucket]
        row = replan(plan, done, at=at.isoformat()).progress.iloc[0]
        assert row["expected_cost"] == pytest.approx(row["planned_cost"], rel=2e-3)


def test_a_price_of_now_is_paid_on_what_is_left() -> None:
    """The market 1 % higher: a buyer's rest costs that more, and fills already made do not."""
    plan = one()
    base = replanned(plan, market=table(name(spread_bps=4)))
    up = replanned(plan, market=table(name(price=50.5, spread_bps=4)))
    moved = up.progress["expected_cost"].iloc[0] - base.progress["expected_cost"].iloc[0]
    left = up.progress["left"].iloc[0]
    assert moved == pytest.approx(0.5 * left, rel=0.02)


def test_outstanding_imbalance_is_the_models() -> None:
    """Of fills as planned, E at every edge, and after a night, is what the recursion gives."""
    plan = two_days()
    arrays = plan.book.arrays
    _, after = imbalance(
        arrays.stages.layout, arrays.stages.theta, plan.figures.shares, arrays.initial
    )
    ends = plan.book.grids[0].end
    for at in edges(plan):
        result = replan(plan, on_plan(plan, at), at=at.isoformat())
        stage = int(np.flatnonzero(ends == at.tz_convert(None).to_datetime64())[0])
        found = result.progress["imbalance"].iloc[0]
        assert found == pytest.approx(after[stage], rel=1e-3, abs=1.0)
    evening = "2026-03-05T18:00:00-05:00"
    (night,) = np.flatnonzero(~plan.book.grids[0].open)
    result = replan(plan, on_plan(plan, evening), at=evening)
    assert result.progress["imbalance"].iloc[0] == pytest.approx(after[night], rel=1e-3)


def test_the_band_is_what_volume_at_random_does() -> None:
    """Means, spread and quantiles of the band's law against slices played in random volume."""
    plan = one()
    arrays = plan.book.arrays
    copies = np.zeros(4_000, dtype=np.int64)
    orders = arrays.take(copies)
    rng = np.random.default_rng(5)
    noise = Noise(0.3, 0.4, following=True)
    factor = volume_factors(orders.stages, noise, rng)
    due = np.where(np.arange(len(plan.figures.shares)) < 6, plan.figures.shares, 0.0)
    played = fills(in_volume(orders, factor), np.tile(plan.figures.shares, len(copies)), factor)
    stage = np.tile(np.arange(len(due)), len(copies))
    done = orders.stages.layout.sum(np.where(stage < 6, played, 0.0))
    low, high = band(arrays.stages.layout, arrays.stages.session, due, arrays.quantity)
    assert np.quantile(done, 0.025) == pytest.approx(low[0], rel=0.03)
    assert min(np.quantile(done, 0.975), 120_000) == pytest.approx(high[0], rel=0.03)
    assert replanned(plan, 0.3).progress["verdict"].iloc[0] == "behind"


# orders that change


def test_cancelled_added_complete_and_over() -> None:
    orders = [
        task(20_000, order_id="gone", symbol="OAKMERE"),
        task(10_000, order_id="short", symbol="FELL", end="11:30", must_complete=False),
        task(9_000, order_id="done", symbol="DALE", end="11:00"),
    ]
    market = [name(), name("FELL"), name("DALE"), name("TARN")]
    plan = planned(orders, market, urgency=0.3, bucket=30.0)
    done = on_plan(plan, MIDDAY)
    done = done[~((done["order_id"] == "short") & (done.index % 2 == 0))]
    now = [*orders[1:], task(5_000, order_id="new", symbol="TARN", side="sell")]
    result = replan(plan, done, at=MIDDAY, orders=table(now))
    states = dict(zip(result.progress["order_id"], result.progress["state"], strict=True))
    assert states == {
        "gone": "cancelled",
        "short": "window over",
        "done": "complete",
        "new": "going",
    }
    assert result.plan is not None
    assert result.plan.book.names == ["new"]
    assert any("gone: not among the orders" in note for note in result.notes)
    assert any("short: its window is over with" in note for note in result.notes)
    left = dict(zip(result.progress["order_id"], result.progress["left"], strict=True))
    assert left["gone"] == 0.0
    assert left["new"] == 5_000


def test_a_new_order_on_the_other_side_feels_what_the_old_one_left() -> None:
    """Our buying that has not faded makes selling dear to the market's sign: Z is negative."""
    plan = one()
    selling = table(task(20_000, order_id="back", side="sell"))
    result = replanned(plan, orders=selling)
    assert result.plan is not None
    bought = replanned(plan)
    assert bought.plan is not None
    buying = float(bought.plan.book.arrays.initial[0])
    assert buying > 0.0
    assert result.plan.book.arrays.initial[0] == pytest.approx(-buying)


def test_nothing_left() -> None:
    plan = one()
    everything = on_plan(plan, "2026-03-05T16:00:01-05:00")
    result = replan(plan, everything, at="16:05")
    assert result.plan is None
    assert result.progress["state"].tolist() == ["complete"]


def test_no_fills_at_the_plans_own_time_are_the_plan() -> None:
    plan = one()
    result = replan(plan, None, at="09:30")
    assert result.plan is not None
    assert (result.plan.schedule["shares"] - plan.schedule["shares"]).abs().max() <= 1
    assert result.plan.book.settings.plan.urgency is None
    assert isinstance(plan.book.settings, Settings)
