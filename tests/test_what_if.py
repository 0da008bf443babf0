"""The verb `what-if`: frontiers, regret, excess, and every point as `plan` has it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler import (
    InfeasibleError,
    InputError,
    MisuseError,
    Settings,
    WhatIf,
    what_if,
)
from scheduler.figures import Figures
from scheduler.scenarios import SOLVED
from scheduler.scenarios.rows import FIGURES
from tests.desk import DAY, Row, name, planned, random_desk, settings_of, table, task, unrounded

TWO = (
    [task(20_000), task(8_000, symbol="FELLSIDE", side="sell", start="10:07", end="15:10")],
    [name(spread_bps=4.0), name("FELLSIDE", price=112.5, adv=8e5, daily_vol=0.016)],
)
PATIENT_TO_URGENT = "0,0.01:20:14"


def tried(
    orders: Row | Sequence[Row], market: Row | Sequence[Row], grid: dict[str, Any], **options: Any
) -> WhatIf:
    """The grid over these rows; settings by their names."""
    known = {"readings", "finish", "out", "fresh", "workers", "cluster", "progress", "at"}
    given = {"at": "09:30"} | {key: options.pop(key) for key in known & options.keys()}
    chosen = settings_of(**options)
    return what_if(table(orders), table(market), grid=grid, settings=chosen, date=DAY, **given)


def row(result: WhatIf, order: str = "OAKMERE-1", **values: Any) -> pd.Series[Any]:
    """The one row of an order at a point."""
    frame = result.scenarios[result.scenarios["order_id"] == order]
    for axis, value in values.items():
        frame = frame[frame[axis] == value]
    assert len(frame) == 1
    return frame.iloc[0]


# the table


def test_a_row_for_every_point_and_order() -> None:
    """The base first, then the full product with the last axis fastest; orders as given."""
    result = tried(*TWO, {"urgency": [1.0, 0.0], "volume": [0.5, 1, 2]})
    frame = result.scenarios
    assert frame["point"].tolist() == [point for point in range(7) for _ in range(2)]
    assert frame["order_id"].tolist() == ["OAKMERE-1", "FELLSIDE-1"] * 7
    assert frame["urgency"].tolist()[2:] == [1.0] * 6 + [0.0] * 6
    assert frame["volume"].tolist()[2:] == [0.5, 0.5, 1, 1, 2, 2] * 2
    assert frame[["urgency", "volume"]].iloc[:2].isna().all().all()
    assert set(FIGURES) < set(frame.columns)
    assert (frame["status"] == "proven").all()


def test_permuted_values_permute_rows() -> None:
    """Each row is the same wherever its values stand in the grid."""
    values = {"urgency": [0.0, 0.1, 0.5, 2.0], "reading": [-0.1, 0.2]}
    one = tried(*TWO, values).scenarios
    turned = {axis: list(reversed(values[axis])) for axis in reversed(values)}
    other = tried(*TWO, turned).scenarios
    keys = ["urgency", "reading", "order_id"]
    one, other = (
        frame[frame["point"] > 0].set_index(keys).sort_index().drop(columns=["point"])
        for frame in (one, other)
    )
    pd.testing.assert_frame_equal(one, other[one.columns], rtol=1e-5, atol=1e-3, check_exact=False)


POINTS: list[tuple[dict[str, Any], Row, Row, dict[str, Any]]] = [
    ({"urgency": 0.7}, {}, {}, {"urgency": 0.7}),
    ({"risk_aversion": 2e-6}, {}, {}, {"risk_aversion": 2e-6}),
    ({"max_participation": 0.05}, {"max_participation": 0.05}, {}, {}),
    ({"start": "10:20", "end": "14:00"}, {"start": "10:20", "end": "14:00"}, {}, {}),
    ({"bucket": 30}, {}, {}, {"bucket": 30.0}),
    ({"volume": 0.6}, {}, {"adv": 0.6e6}, {}),
    ({"volatility": 1.7}, {}, {"daily_vol": 0.034}, {}),
    ({"impact_law": "root-lasting"}, {}, {}, {"impact_law": "root-lasting"}),
    ({"feedback": 0.0}, {}, {}, {"feedback": 0.0}),
    ({"relaxation": 0.2}, {}, {}, {"relaxation": 0.2}),
    (
        {"urgency": 0.3, "volume": 2.0, "bucket": 10, "relaxation": 0.1},
        {},
        {"adv": 2e6},
        {"urgency": 0.3, "bucket": 10.0, "relaxation": 0.1},
    ),
]


@pytest.mark.parametrize(("point", "order", "market", "chosen"), POINTS)
def test_a_point_is_what_plan_gives(
    point: dict[str, Any], order: Row, market: Row, chosen: dict[str, Any]
) -> None:
    """The same change made by hand in tables and settings, planned alone, before rounding."""
    grid = {axis: [value] for axis, value in point.items()}
    found = row(tried(task(30_000), name(spread_bps=4.0), grid), point=1)
    alone = planned(task(30_000, **order), name(spread_bps=4.0, **market), **chosen)
    figures = unrounded(alone)[1]
    assert found["expected_cost"] == pytest.approx(figures.expected_cost[0], rel=1e-5)
    assert found["cost_std"] == pytest.approx(figures.cost_std[0], rel=1e-5)
    assert found["objective"] == pytest.approx(figures.objective[0], rel=1e-7)
    assert found["expected_shortfall_95"] == pytest.approx(figures.quantiles[-1, 0], rel=1e-5)


def test_neighbours_that_start_from_others_are_the_same() -> None:
    """Warm-started along the urgency or solved alone: one optimum."""
    result = tried(task(40_000), name(), {"urgency": "0.02:5:30"})
    for point in (1, 7, 19, 30):
        found = row(result, point=point)
        figures = unrounded(planned(task(40_000), name(), urgency=found["urgency"]))[1]
        assert found["objective"] == pytest.approx(figures.objective[0], rel=1e-8)
        assert found["cost_std"] == pytest.approx(figures.cost_std[0], rel=1e-4)


def test_a_reading_stands_for_every_symbol_at_time_zero() -> None:
    """As a readings table with that value for all; what the table had is replaced."""
    taken = pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": [0.3]})
    result = tried(*TWO, {"reading": [-0.2]}, readings=taken)
    both = pd.DataFrame({"symbol": ["OAKMERE", "FELLSIDE"], "imbalance": [-0.2, -0.2]})
    figures = unrounded(planned(*TWO, readings=both))[1]
    found = result.scenarios[result.scenarios["point"] == 1]
    np.testing.assert_allclose(found["objective"], figures.objective, rtol=1e-7)


def test_a_published_law_is_taken_as_published() -> None:
    """Calibrated columns of the market table belong to the base's law alone."""
    calibrated = name(relaxation=0.11, impact_coefficient=1.1, impact_exponent=0.6)
    result = tried(task(), calibrated, {"impact_law": ["imbalance", "rate-power"]})
    base, same, other = (row(result, point=point) for point in range(3))
    assert same["objective"] == pytest.approx(base["objective"], rel=1e-9)
    published = unrounded(planned(task(), name(), impact_law="rate-power"))[1]
    assert other["objective"] == pytest.approx(published.objective[0], rel=1e-7)


def test_times_of_a_schedule() -> None:
    """At a cap that just suffices trading is in proportion to a flat day's volume."""
    market = name(profile="flat")
    quantity = 50_000.0  # 1e6 q/(1 - q) at a cap of q
    cap = quantity / (1e6 + quantity)
    result = tried(task(quantity), market, {"max_participation": [cap * (1 + 1e-9)]}, bucket=30)
    found = row(result, point=1)
    assert found["half_done"][:16] == "2026-03-05T12:45"
    assert found["last_trade"] == "2026-03-05T16:00:00-05:00"
    assert found["first_bucket_share"] == pytest.approx(1 / 13, rel=1e-6)


# frontiers


def test_patience_costs_less_and_risks_more() -> None:
    """Along the urgency cost rises and risk falls; the implied risk aversion rises."""
    result = tried(*TWO, {"urgency": PATIENT_TO_URGENT, "volatility": [1, 2]})
    assert len(result.frontiers) == 4
    for frontier in result.frontiers:
        assert (np.diff(frontier.aim) > 0.0).all()
        assert (np.diff(frontier.cost) >= -1e-6).all()
        assert (np.diff(frontier.risk) <= 1e-6).all()
        implied = result.scenarios["risk_aversion"].to_numpy()[frontier.rows]
        assert (np.diff(implied) > 0.0).all()


def test_the_patient_end_is_the_closed_form() -> None:
    """U = 0 without caps on a flat day: Alfonsi, Fruth & Schied's least cost, to O(1/N).

    c[(Q - xi T/r)^{3/2}/(3/2) + (T/r) xi^{3/2}], xi = Q/(T/r + 2.25), c = p sqrt(2) s0/sqrt(ADV).
    """
    quantity = 20_000.0
    market, free = name(profile="flat"), {"max_participation": 1.0}
    result = tried(task(quantity), market, {"urgency": [0], "bucket": [3.25, 6.5, 13]}, **free)
    span = 1.0 / 0.05
    xi = quantity / (span + 2.25)
    c = 50.0 * np.sqrt(2.0) * 0.02 / np.sqrt(1.5) / np.sqrt(1e6)
    least = c * ((quantity - xi * span) ** 1.5 / 1.5 + span * xi**1.5)
    over = [row(result, bucket=bucket)["expected_cost"] / least - 1.0 for bucket in (3.25, 6.5, 13)]
    assert 0.0 < over[0] < 3e-3
    assert 1.5 < over[1] / over[0] < 2.5
    assert 1.5 < over[2] / over[1] < 2.5


def test_the_urgent_end_trades_as_early_as_the_caps_allow() -> None:
    """Its risk is that of the caps filled one after the other."""
    result = tried(task(60_000), name(), {"urgency": [1e5]}, max_participation=0.1)
    alone = planned(task(60_000), name(), max_participation=0.1)
    cap, layout = alone.book.arrays.cap, alone.book.layout
    early = np.minimum(cap, np.maximum(60_000.0 - (layout.cumsum(cap) - cap), 0.0))
    figures = Figures(alone.book.arrays, alone.book.charges, early)
    assert row(result, point=1)["cost_std"] == pytest.approx(figures.cost_std[0], rel=1e-4)


def test_the_knee_is_marked_once_a_frontier() -> None:
    """In the table, and explained in the summary."""
    result = tried(*TWO, {"urgency": PATIENT_TO_URGENT})
    marked = result.scenarios[result.scenarios["knee"]]
    assert sorted(marked["order_id"]) == ["FELLSIDE-1", "OAKMERE-1"]
    knees = {knee["order_id"]: knee for knee in result.summary["knees"]}
    for _, found in marked.iterrows():
        assert knees[found["order_id"]]["urgency"] == found["urgency"]
        assert "bps of cost shed" in knees[found["order_id"]]["meaning"]


# worlds and choices


def test_regret_is_what_the_base_schedule_loses() -> None:
    """Against a schedule made for that world, both priced there; none in the base world."""
    grid = {"volatility": [0.5, 1, 2], "relaxation": [0.05, 0.4]}
    order, market = task(50_000), name(spread_bps=3.0)
    result = tried(order, market, grid, urgency=0.4, max_participation=0.5)
    mine = unrounded(planned(order, market, urgency=0.4, max_participation=0.5))[0].shares
    for volatility in (0.5, 1, 2):
        for relaxation in (0.05, 0.4):
            world = planned(
                order,
                name(spread_bps=3.0, daily_vol=0.02 * volatility),
                urgency=0.4,
                max_participation=0.5,
                relaxation=relaxation,
            )
            best = unrounded(world)[1].objective[0]
            lost = Figures(world.book.arrays, world.book.charges, mine).objective[0] - best
            found = row(result, volatility=volatility, relaxation=relaxation)["regret"]
            assert found == pytest.approx(lost, abs=2e-7 * best)
    assert row(result, volatility=1, relaxation=0.05)["regret"] < 1e-7
    assert row(result, volatility=2, relaxation=0.4)["regret"] > 1.0
    assert row(result, point=0)["regret"] == 0.0


def test_regret_of_other_choices_is_against_their_own_schedule() -> None:
    """A point with an urgency of its own is compared with that urgency's schedule."""
    both = tried(*TWO, {"urgency": [0.1, 1.0], "volatility": [2.0]})
    for urgency in (0.1, 1.0):
        alone = tried(*TWO, {"volatility": [2.0]}, urgency=urgency)
        for order in ("OAKMERE-1", "FELLSIDE-1"):
            one = row(both, order, urgency=urgency)
            other = row(alone, order, point=1)
            assert one["regret"] == pytest.approx(other["regret"], abs=1e-7 * one["objective"])


@settings(max_examples=12, deadline=None)
@given(st.data())
def test_regret_is_never_negative(data: st.DataObject) -> None:
    """The best of a world, solved apart, is no worse than the base schedule moved within it."""
    seed = data.draw(st.integers(0, 10_000))
    orders, market = random_desk(seed, most=2)
    axes = {
        "volume": data.draw(st.sampled_from([[0.4, 3.0], [1.0]])),
        "volatility": data.draw(st.sampled_from([[0.3], [1.0, 2.5]])),
        "reading": data.draw(st.sampled_from([[-0.5], [0.2, 1.0]])),
        "feedback": data.draw(st.sampled_from([[0.0, 1.0], [3.0]])),
    }
    result = tried(orders, market, axes, urgency=data.draw(st.sampled_from([0.0, 0.3, 2.0])))
    solved = result.scenarios[result.scenarios["status"].isin(SOLVED)]
    assert (solved["regret"] >= 0.0).all()
    assert (solved.loc[solved["point"] == 0, "regret"] == 0.0).all()
    proven = solved[(solved["status"] == "proven") & (solved["point"] > 0)].head(2)
    for _, found in proven.iterrows():  # taking over the base's schedule has hidden nothing
        best = _alone(orders, market, found, result.study.recipe.settings.plan.urgency)
        assert found["objective"] == pytest.approx(best, rel=1e-6, abs=1e-3)


def _alone(
    orders: list[Row], market: list[Row], found: pd.Series[Any], urgency: float | None
) -> float:
    at = next(i for i, order in enumerate(orders) if order["order_id"] == found["order_id"])
    changed = market[at] | {
        "adv": market[at]["adv"] * found["volume"],
        "daily_vol": market[at]["daily_vol"] * found["volatility"],
    }
    taken = pd.DataFrame({"symbol": [changed["symbol"]], "imbalance": [found["reading"]]})
    result = planned(
        orders[at], changed, readings=taken, feedback=found["feedback"], urgency=urgency
    )
    return float(unrounded(result)[1].objective[0])


def test_an_unfinished_order_is_compared_at_what_can_be_done() -> None:
    """With more volume more of it trades, in the best schedule and in the base's alike."""
    order = task(95_000, start="11:00", end="13:00", must_complete="false")
    result = tried(order, name(), {"volume": [0.5, 1, 2, 8]}, max_participation=0.1)
    frame = result.scenarios
    assert (np.diff(frame["residual"].to_numpy()[1:]) < 0.0).all()
    assert row(result, volume=8)["residual"] == 0.0
    assert (frame["regret"] >= 0.0).all()
    assert row(result, volume=2)["regret"] == 0.0  # all caps used, whatever the schedule


def test_what_a_choice_forbids_of_the_base() -> None:
    """Shares above a lower cap, outside a shorter window; none under looser limits."""
    order, market = task(40_000), name(profile="flat")
    base = planned(order, market)
    mine, cap = unrounded(base)[0].shares, base.book.arrays.cap
    grid = {"max_participation": [0.05, 0.25, 0.5]}
    result = tried(order, market, grid)
    tight = cap * (0.05 / 0.95) / (0.25 / 0.75)
    over = np.maximum(mine - tight, 0.0).sum()
    assert over > 1000.0
    found = [row(result, max_participation=m)["excess_shares"] for m in (0.05, 0.25, 0.5)]
    assert found == pytest.approx([over, 0.0, 0.0], rel=1e-4)
    later = tried(order, market, {"start": ["09:30", "11:30"], "bucket": [15, 45]})
    before = mine[:8].sum()
    assert row(later, start="11:30:00", bucket=15)["excess_shares"] == pytest.approx(before)
    assert row(later, start="09:30:00", bucket=45)["excess_shares"] == 0.0
    assert np.isnan(row(later, start="11:30:00", bucket=15)["regret"])


def test_points_without_a_schedule_are_rows_without_figures() -> None:
    """A cap too low, an end too early: only of the orders that it concerns."""
    result = tried(*TWO, {"end": ["09:31", "13:00"], "max_participation": [1e-4, 0.25]})
    frame = result.scenarios.set_index(["end", "max_participation", "order_id"])["status"]
    good = frame[frame != "infeasible"].dropna()
    assert set(good.index.dropna()) == {
        ("13:00:00", 0.25, "OAKMERE-1"),
        ("13:00:00", 0.25, "FELLSIDE-1"),
    }
    bad = result.scenarios[result.scenarios["status"] == "infeasible"]
    assert len(bad) == 6
    assert bad[list(FIGURES)].isna().all().all()
    assert result.summary["points"][1]["without_schedule"] == 2


def test_the_conic_solver_agrees() -> None:
    """A grid through the general solver, feedback off."""
    grid = {"urgency": [0.1, 1.0], "volatility": [1.0, 2.0]}
    one, other = (
        tried(task(), name(), grid, feedback=0.0, bucket=60, solver=solver).scenarios
        for solver in ("interior", "conic")
    )
    np.testing.assert_allclose(one["objective"], other["objective"], rtol=1e-6)
    np.testing.assert_allclose(one["regret"], other["regret"], atol=1e-6 * one["objective"].max())


def test_values_near_the_base() -> None:
    """On scales by ratio, on other axes by difference; of names the base's own or the first."""
    grid = {
        "urgency": [0.0, 0.05, 0.3],
        "volatility": [0.6, 1.3],
        "reading": [-0.2, 0.1],
        "impact_law": ["rate-power", "imbalance"],
        "start": ["10:00", "11:00"],
        "end": ["12:00", "2026-03-05T15:45"],
    }
    near = tried(task(), name(), grid).near_base["OAKMERE-1"]
    assert near == {
        "urgency": 0.05,
        "volatility": 1.3,
        "reading": 0.1,
        "impact_law": "imbalance",
        "start": "10:00:00",
        "end": "2026-03-05T15:45:00",
    }
    implied = tried(task(), name(), {"risk_aversion": [0, 1e-7, 1e-3]}).near_base
    assert implied == {"OAKMERE-1": {"risk_aversion": 1e-7}}


def test_points_that_a_finish_time_forbids() -> None:
    """A start after it leaves no schedule, whatever the world; the base has its own start."""
    early = {"start": ["09:30", "11:00"], "volume": [1, 2]}
    result = tried(*TWO, early, finish="0.3@10:45", max_participation=0.5)
    status = result.scenarios.set_index(["start", "volume", "order_id"])["status"]
    assert (status.loc["09:30:00"] == "proven").all()
    assert (status.loc["11:00:00"] == "infeasible").all()
    alone = planned(*TWO, finish="0.3@10:45", max_participation=0.5)
    whole = result.scenarios[result.scenarios["point"] == 0]
    np.testing.assert_allclose(whole["objective"], unrounded(alone)[1].objective, rtol=1e-7)


# refusals


@pytest.mark.parametrize(
    ("grid", "message"),
    [
        ({}, "grid: varies nothing"),
        ({"urgncy": [1]}, "axis urgncy: is no axis; did you mean 'urgency'"),
        ({"urgency": []}, "axis urgency: has no values"),
        ({"urgency": ""}, "axis urgency: has no values"),
        ({"urgency": [-1]}, "axis urgency: must be a number from 0 to 1e"),
        ({"urgency": [float("nan")]}, "axis urgency: must be a number"),
        ({"volume": ["much"]}, "axis volume: must be a number from 0.01 to 100, got 'much'"),
        ({"volume": [True]}, "axis volume: must be a number"),
        ({"volume": [1, 1.0]}, "axis volume: is given twice, got '1.0'"),
        ({"reading": [6]}, "axis reading: must be a number from -5 to 5, got '6'"),
        ({"impact_law": ["square"]}, "axis impact_law: must be one of imbalance,"),
        ({"end": ["25:00"]}, "axis end: is no time of day, got '25:00'"),
        ({"urgency": "0:10:20"}, "must begin above 0, got '0:10:20'; give 0 as a value"),
        ({"urgency": "1:10"}, "axis urgency: is no range, got '1:10'"),
        ({"urgency": "10:1:5"}, "axis urgency: is no range"),
        ({"urgency": [0.1], "risk_aversion": [1e-6]}, "urgency and risk_aversion: exclude each"),
    ],
)
def test_refused_grids(grid: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError) as caught:
        tried(*TWO, grid)
    assert message in str(caught.value)


def test_every_problem_of_a_grid_at_once() -> None:
    with pytest.raises(InputError) as caught:
        tried(*TWO, {"urgency": [-1, -2], "volume": [0], "spread": [1]})
    assert len(caught.value.problems) == 4


def test_a_grid_too_large_is_refused_with_its_count() -> None:
    """Points times orders; before anything is solved."""
    with pytest.raises(MisuseError, match=r"12,000,000 rows to solve \(6,000,000 urgency x 2 vol"):
        tried(*TWO, {"urgency": "0.01:10:6000000", "volume": [1, 2]})
    with pytest.raises(MisuseError, match=r"16,000,000 rows .* x 2 orders"):
        tried(*TWO, {"urgency": "0.01:10:4000", "volume": "0.5:2:2000"})


def test_orders_of_one_symbol_are_refused() -> None:
    """They share an imbalance; the rows of a grid are each alone."""
    orders = [task(20_000), task(5_000, order_id="OAKMERE-2")]
    with pytest.raises(InputError, match="row 3, column symbol: has another order of its symbol"):
        tried(orders, name(), {"urgency": [0.1]})


def test_refused_for_now() -> None:
    """Tables of a list, and budgets."""
    orders, market = (table(rows) for rows in TWO)
    with pytest.raises(MisuseError, match="solves every order alone"):
        what_if(orders, market, grid={"urgency": [1]}, corridors=pd.DataFrame())
    with pytest.raises(MisuseError, match="no budgets"):
        tried(*TWO, {"urgency": [1]}, risk_budget=10.0)
    with pytest.raises(MisuseError, match="grid must be a mapping"):
        what_if(orders, market, grid=["urgency=1"])  # type: ignore[arg-type]
    with pytest.raises(MisuseError, match="Settings"):
        what_if(orders, market, grid={"urgency": [1]}, settings={})  # type: ignore[arg-type]


def test_the_base_must_have_a_schedule() -> None:
    with pytest.raises(InfeasibleError, match="OAKMERE-1"):
        tried(task(2e6), name(), {"max_participation": [0.9]}, max_participation=0.01)


def test_settings_are_left_alone() -> None:
    """An aim in the settings gives way to the axis, in a copy."""
    chosen = Settings().with_values("plan", risk_aversion=1e-6)
    orders, market = (table(rows) for rows in TWO)
    result = what_if(orders, market, grid={"urgency": [0.5]}, settings=chosen, date=DAY, at="09:30")
    assert chosen.plan.risk_aversion == 1e-6
    assert result.scenarios["risk_aversion"].iloc[0] == pytest.approx(1e-6)
    figures = unrounded(planned(*TWO, urgency=0.5))[1]
    found = result.scenarios[result.scenarios["point"] == 1]
    np.testing.assert_allclose(found["objective"], figures.objective, rtol=1e-7)
