"""The verb `plan`: its schedule adds up, its summary says what it must, its optimum is one."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler import Finish, InfeasibleError, MisuseError, Plan, Settings, plan, read_settings
from scheduler.figures import Figures
from scheduler.problem import assemble
from scheduler.settings import LAWS, settings_from_dict
from scheduler.solve.schedule import schedule
from scheduler.tables.write import to_json
from tests.desk import (
    DAY,
    in_stages,
    name,
    planned,
    random_desk,
    row_of,
    slices,
    task,
    unrounded,
)
from tests.model.direct import stage_costs, stage_variances
from tests.solve.recomputed import relative_gap

EXAMPLES = Path(__file__).parents[1] / "examples"
COLUMNS = [
    *("order_id", "symbol", "side", "bucket", "kind", "start", "end", "expected_volume"),
    *("shares", "cumulative", "remaining", "participation", "imbalance", "displacement_bps"),
    *("expected_cost", "cost_std_remaining"),
]
ORDERS = ("HB-1", "HB-2", "HB-3", "HB-4", "HB-5")
FIGURES = {
    *("quantity", "notional", "expected_cost", "expected_cost_bps", "impact", "spread", "fees"),
    *("permanent", "residual", "residual_cost", "cost_std", "cost_std_bps", "quantiles"),
    *("expected_shortfall_95", "objective", "urgency", "risk_aversion", "certificate"),
    *("evenly_timed", "volume_proportional", "second_opinion", "other_volume"),
}
CERTIFICATE = {
    *("status", "meaning", "gap", "kkt_residual", "iterations", "seconds", "rounding_loss"),
}


@pytest.fixture(scope="module")
def example() -> Plan:
    """The plan of the example's five orders."""
    tables = {key: EXAMPLES / f"{key}.csv" for key in ("profiles", "readings")}
    chosen = read_settings(EXAMPLES / "settings.toml")
    sources = (EXAMPLES / "orders.csv", EXAMPLES / "market.csv")
    return plan(*sources, **tables, settings=chosen, date=DAY, at="09:30")


@pytest.fixture(scope="module")
def asked() -> pd.DataFrame:
    return pd.read_csv(EXAMPLES / "orders.csv").set_index("order_id")


# the schedule adds up


def test_columns_and_order_of_the_rows(example: Plan) -> None:
    """The documented columns; orders as given, buckets counted from 1 in time order."""
    frame = example.schedule
    assert frame.columns.tolist() == COLUMNS
    assert tuple(frame["order_id"].unique()) == ORDERS
    for order in ORDERS:
        rows = slices(example, order)
        assert rows["bucket"].tolist() == list(range(1, len(rows) + 1))
    assert set(frame["side"]) == {"buy", "sell"}
    assert set(frame["kind"]) == {"continuous", "auction"}


def test_shares_are_whole_lots_that_add_up(example: Plan, asked: pd.DataFrame) -> None:
    """Exactly to the quantity, or to what the summary says is left of it."""
    assert pd.api.types.is_integer_dtype(example.schedule["shares"])
    for order in ORDERS:
        shares = slices(example, order)["shares"]
        lot = asked["lot_size"].fillna(1.0)[order]
        assert (shares >= 0).all()
        assert (shares % lot == 0).all()
        assert shares.sum() + row_of(example, order)["residual"] == asked["quantity"][order]


def test_cumulative_and_remaining_follow_from_shares(example: Plan, asked: pd.DataFrame) -> None:
    """Row by row, in whole shares."""
    for order in ORDERS:
        rows = slices(example, order)
        assert (rows["cumulative"] == rows["shares"].cumsum()).all()
        assert (rows["cumulative"] + rows["remaining"] == asked["quantity"][order]).all()


def test_participation_is_own_over_total(example: Plan, asked: pd.DataFrame) -> None:
    """And above no cap by as much as a lot."""
    frame = example.schedule
    total = frame["shares"] + frame["expected_volume"]
    assert frame["participation"].to_numpy() == pytest.approx((frame["shares"] / total).to_numpy())
    by_kind = {"continuous": "max_participation", "auction": "max_auction_participation"}
    usual = {"continuous": 0.25, "auction": 0.10}
    for order in ORDERS:
        rows = slices(example, order)
        given = asked.loc[order]
        caps = rows["kind"].map(
            {k: usual[k] if np.isnan(given[c]) else given[c] for k, c in by_kind.items()}
        )
        lot = 1.0 if np.isnan(given["lot_size"]) else given["lot_size"]
        assert (rows["shares"] < rows["expected_volume"] * caps / (1 - caps) + lot).all()


def test_times_carry_their_offset_and_follow_one_another(example: Plan) -> None:
    """Local New York time; a bucket ends where the next begins, but for the night."""
    start, end = (pd.to_datetime(example.schedule[edge]) for edge in ("start", "end"))
    assert example.schedule["start"].str.endswith("-05:00").all()
    assert (start <= end).all()
    for order in ORDERS:
        here = example.schedule["order_id"] == order
        opens, closes = start[here].to_numpy()[1:], end[here].to_numpy()[:-1]
        apart = np.flatnonzero(opens != closes)
        assert len(apart) == (1 if order == "HB-3" else 0)
    rows = slices(example, "HB-2")
    assert rows["start"].iat[0] == "2026-03-05T10:07:00-05:00"
    assert rows["end"].iat[-1] == "2026-03-05T15:10:00-05:00"


def test_imbalance_is_the_recursion_over_the_rows(example: Plan) -> None:
    """Z e^-theta + q (1 - e^-theta)/theta from row to row, theta = V/L, from the reading on.

    Signed as the market sees it; displacement is k sigma_0 (|Z|/ADV)^delta of it.
    """
    market = pd.read_csv(EXAMPLES / "market.csv").set_index("symbol")
    reading = {"HB-1": 0.15, "HB-4": -0.10}
    for order in ORDERS:
        rows = slices(example, order)
        adv, vol = market.loc[rows["symbol"].iat[0], ["adv", "daily_vol"]]
        side = 1.0 if rows["side"].iat[0] == "buy" else -1.0
        level = reading.get(order, 0.0)
        for row in rows.itertuples():
            theta = row.expected_volume / (0.05 * adv)
            grown = side * row.shares / (0.05 * adv) * -np.expm1(-theta) / theta
            level = level * np.exp(-theta) + grown
            assert row.imbalance == pytest.approx(level, rel=1e-9)
            moved = np.sqrt(2.0 / 1.5) * vol * np.sign(level) * np.sqrt(0.05 * abs(level))
            assert row.displacement_bps == pytest.approx(1e4 * moved, rel=1e-9)


def test_costs_of_the_rows_add_up_to_the_summary(example: Plan) -> None:
    """And so do the parts of the cost, for every order and for the list."""
    cost = example.schedule.groupby("order_id")["expected_cost"].sum()
    total = example.summary["total"]
    for order in ORDERS:
        figures = row_of(example, order)
        assert cost[order] == pytest.approx(figures["expected_cost"], rel=1e-9, abs=1e-6)
        parts = sum(figures[part] for part in ("impact", "spread", "fees", "permanent"))
        assert parts == pytest.approx(figures["expected_cost"])
    for figure in ("expected_cost", "notional", "impact", "spread", "fees", "residual_cost"):
        whole = sum(row_of(example, order)[figure] for order in ORDERS)
        assert total[figure] == pytest.approx(whole)
    assert total["orders"] == 5
    traded = total["notional"] - row_of(example, "HB-5")["residual"] * 9.15
    assert total["expected_cost_bps"] == pytest.approx(1e4 * total["expected_cost"] / traded)


@pytest.mark.parametrize("order", ORDERS)
def test_cost_and_risk_are_what_integrating_the_path_gives(example: Plan, order: str) -> None:
    """Along the rows as they stand, by a slow integration that shares nothing with the figures."""
    at = ORDERS.index(order)
    book = example.book
    one = book.arrays.take(np.array([at]))
    here = book.layout.owner == at
    shares = in_stages(example, example.schedule["shares"])[here]
    impact, variances = stage_costs(one, shares), stage_variances(one, shares)
    figures = row_of(example, order)
    assert figures["cost_std"] == pytest.approx(np.sqrt(variances.sum()), rel=1e-6)
    unit = figures["notional"] * 1e-8
    assert figures["impact"] == pytest.approx(impact.sum(), abs=unit)
    rows = slices(example, order)
    still = np.sqrt(np.maximum(variances.sum() - np.cumsum(variances), 0.0))[book.kind[here] != 2]
    assert rows["cost_std_remaining"].to_numpy() == pytest.approx(still, rel=1e-5, abs=unit)
    charged = rows["expected_cost"].sum() - figures["impact"]
    assert charged == pytest.approx(figures["spread"] + figures["fees"])


def test_spread_and_fees_by_hand(example: Plan) -> None:
    """Half the quoted spread outside auctions; fees of the side on all that trades."""
    rows, figures = slices(example, "HB-4"), row_of(example, "HB-4")
    crossed = rows.loc[rows["kind"] == "continuous", "shares"].sum()
    assert figures["spread"] == pytest.approx(0.5 * 2e-4 * 67.40 * crossed)
    assert figures["fees"] == pytest.approx(0.5e-4 * 67.40 * 310_000)
    per_share = row_of(planned(task(1_000), name(fee_per_share=0.01, buy_fee_bps=2.0)))
    assert per_share["fees"] == pytest.approx(1_000 * (0.01 + 2e-4 * 50.0))


# the summary


def test_summary_has_every_documented_figure(example: Plan) -> None:
    """For each order, its certificate, its rivals, its other laws and other volumes."""
    summary = example.summary
    assert summary["schema"] == 1
    assert {"total", "orders", "settings", "inputs", "date", "at", "version"} <= summary.keys()
    assert list(summary["orders"]) == list(ORDERS)
    brief = {"expected_cost", "expected_cost_bps", "cost_std", "cost_std_bps", "objective"}
    for figures in summary["orders"].values():
        assert figures.keys() >= FIGURES
        assert figures["certificate"].keys() == CERTIFICATE
        assert figures["second_opinion"].keys() == set(LAWS) - {"imbalance"}
        assert figures["other_volume"].keys() == {
            *("half_by_clock", "half_by_volume", "double_by_clock", "double_by_volume"),
        }
        for rival in ("evenly_timed", "volume_proportional"):
            assert figures[rival].keys() >= brief
        for case in (*figures["second_opinion"].values(), *figures["other_volume"].values()):
            assert case.keys() >= brief


def test_what_a_plan_was_made_from_is_in_the_summary(example: Plan) -> None:
    """Date, planning time, the paths of the tables, and settings that read back."""
    summary = example.summary
    assert summary["date"] == "2026-03-05"
    assert pd.Timestamp(summary["at"]) == pd.Timestamp("2026-03-05T09:30-05:00")
    assert summary["inputs"] == {
        key: str(EXAMPLES / f"{key}.csv") for key in ("orders", "market", "profiles", "readings")
    }
    chosen = read_settings(EXAMPLES / "settings.toml")
    assert settings_from_dict(summary["settings"]) == chosen != Settings()


def test_basis_points_are_of_the_notional(example: Plan) -> None:
    """Quantity times price at time zero."""
    figures = row_of(example, "HB-3")
    assert figures["notional"] == pytest.approx(650_000 * 23.70)
    for figure in ("expected_cost", "cost_std"):
        assert figures[f"{figure}_bps"] == pytest.approx(1e4 * figures[figure] / (650_000 * 23.70))


def test_objective_and_implied_risk_aversion(example: Plan) -> None:
    """C + U std, and lambda = U/(2 std)."""
    for order in ORDERS:
        figures = row_of(example, order)
        std = figures["cost_std"]
        assert figures["urgency"] == 0.2
        assert figures["objective"] == pytest.approx(figures["expected_cost"] + 0.2 * std)
        assert figures["risk_aversion"] == pytest.approx(0.2 / (2.0 * std))


def test_the_implied_risk_aversion_gives_the_same_plan(example: Plan) -> None:
    """Asked for in place of the urgency: the same slices to a few lots, urgency left open."""
    figures = row_of(example, "HB-2")
    market = name("FELLSIDE", price=112.5, adv=8e5, daily_vol=0.016, spread_bps=3)
    sell = task(42_000, symbol="FELLSIDE", side="sell", start="10:07", end="15:10")
    again = planned(sell, market, risk_aversion=figures["risk_aversion"])
    difference = slices(again, "FELLSIDE-1")["shares"] - slices(example, "HB-2")["shares"]
    assert difference.abs().max() <= 42
    assert row_of(again, "FELLSIDE-1")["urgency"] is None


def test_quantiles_are_a_normal_mixture(example: Plan) -> None:
    """In order, with a fatter tail than the normal; without energy levels, the normal itself."""
    for order in ORDERS:
        figures = row_of(example, order)
        values = list(figures["quantiles"].values())
        assert list(figures["quantiles"]) == ["0.05", "0.25", "0.5", "0.75", "0.95", "0.99"]
        assert values == sorted(values)
        assert figures["expected_shortfall_95"] > figures["quantiles"]["0.95"]
        normal = figures["expected_cost"] + 2.3263 * figures["cost_std"]
        assert figures["quantiles"]["0.99"] > normal
    plain = row_of(planned(task(), name(), level_rate=0.0))
    std, mean = plain["cost_std"], plain["expected_cost"]
    assert plain["quantiles"]["0.95"] == pytest.approx(mean + 1.644854 * std, rel=1e-6)
    assert plain["expected_shortfall_95"] == pytest.approx(mean + 2.062713 * std, rel=1e-6)


def test_risk_of_a_list_is_given_as_two_bounds(example: Plan) -> None:
    """Root of the sum of squares, and the sum; a single order has one risk."""
    deviations = np.array([row_of(example, order)["cost_std"] for order in ORDERS])
    total = example.summary["total"]
    assert total["cost_std_independent"] == pytest.approx(np.sqrt((deviations**2).sum()))
    assert total["cost_std_fully_dependent"] == pytest.approx(deviations.sum())
    assert "cost_std" not in total
    alone = planned(task(), name())
    assert alone.summary["total"]["cost_std"] == row_of(alone)["cost_std"]


def test_rivals_of_an_uncapped_order_by_hand() -> None:
    """Even in clock time without the auctions; in proportion to volume with them."""
    result = planned(task(max_participation=1, max_auction_participation=1), name())
    rows = slices(result)
    start, end = (pd.to_datetime(rows[edge]) for edge in ("start", "end"))
    minutes = (end - start).dt.total_seconds().to_numpy()
    volume = rows["expected_volume"].to_numpy()
    for rival, pattern in (("evenly_timed", minutes), ("volume_proportional", volume)):
        shares = 20_000 * pattern / pattern.sum()
        figures = Figures(result.book.arrays, result.book.charges, in_stages(result, shares))
        told = row_of(result)[rival]
        assert told["expected_cost"] == pytest.approx(float(figures.expected_cost[0]))
        assert told["cost_std"] == pytest.approx(float(figures.cost_std[0]))


@pytest.mark.parametrize("law", sorted(set(LAWS) - {"imbalance"}))
def test_second_opinion_is_the_schedules_cost_in_a_plan_by_that_law(law: str) -> None:
    """The same slices priced in a book that was made with the law as a setting."""
    sell, market = task(side="sell"), name(spread_bps=4, shares_outstanding=3e8)
    result = planned(sell, market)
    other = planned(sell, market, impact_law=law)
    shares = in_stages(result, result.schedule["shares"])
    figures = Figures(other.book.arrays, other.book.charges, shares)
    told = row_of(result)["second_opinion"][law]
    assert told["expected_cost"] == pytest.approx(float(figures.expected_cost[0]))
    assert told["cost_std"] == pytest.approx(float(figures.cost_std[0]))
    assert "imbalance" in row_of(other)["second_opinion"]


def test_other_volumes_are_priced_in_the_market_they_speak_of() -> None:
    """By the clock the same slices, by the volume the same participation, in half or double ADV."""
    result = planned(task(), name())
    rows = slices(result)["shares"].to_numpy(dtype=float)
    told = row_of(result)["other_volume"]
    done = np.minimum(2.0 * np.cumsum(rows), 20_000.0)
    cases = {
        "half_by_clock": (5e5, rows),
        "half_by_volume": (5e5, rows / 2.0),
        "double_by_clock": (2e6, rows),
        "double_by_volume": (2e6, np.diff(done, prepend=0.0)),
    }
    for case, (adv, shares) in cases.items():
        book = planned(task(), name(adv=adv)).book
        figures = Figures(book.arrays, book.charges, in_stages(result, shares))
        assert told[case]["expected_cost"] == pytest.approx(float(figures.expected_cost[0]))
        assert told[case]["residual"] == pytest.approx(20_000 - shares.sum())
    assert told["half_by_volume"]["residual_cost"] > 0.0


def test_a_benchmark_of_ones_own_is_told_apart() -> None:
    """What happened before time zero is a delay cost, never part of the expected cost."""
    plain = row_of(planned(task(side="sell"), name()))
    late = row_of(planned(task(side="sell", arrival_price=51.0), name()))
    assert plain["delay_cost"] is None
    assert late["delay_cost"] == pytest.approx(20_000 * 1.0)
    assert late["expected_cost"] == plain["expected_cost"]


def test_written_files_read_back(example: Plan, tmp_path: Path) -> None:
    """CSV and Parquet hold the schedule, JSON the summary."""
    example.write(tmp_path / "out")
    assert {path.name for path in (tmp_path / "out").iterdir()} == {"schedule.csv", "summary.json"}
    frame = pd.read_csv(tmp_path / "out" / "schedule.csv")
    pd.testing.assert_frame_equal(frame, example.schedule, check_exact=True)
    written = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert written == json.loads(to_json(example.summary))
    example.write(tmp_path / "out", parquet=True)
    frame = pd.read_parquet(tmp_path / "out" / "schedule.parquet")
    pd.testing.assert_frame_equal(frame, example.schedule, check_exact=True)


def test_two_aims_exclude_each_other() -> None:
    """One of urgency, risk aversion, risk budget and cost budget."""
    with pytest.raises(MisuseError, match="urgency and cost_budget exclude each other"):
        planned(task(), name(), urgency=0.1, cost_budget=5.0)


# the optimum


def _desk(seed: int, **chosen: Any) -> Plan:
    return planned(*random_desk(seed), **chosen)


seeds = st.integers(0, 2**32 - 1)
urgencies = st.sampled_from([0.0, 0.1, 0.5, 1.645, 10.0])


@given(seeds, urgencies)
@settings(max_examples=10, deadline=None)
def test_certificates_hold_when_recomputed(seed: int, urgency: float) -> None:
    """Gap from complex-step gradients of the formulas written out anew; duals not used."""
    result = _desk(seed, urgency=urgency)
    solved, _ = unrounded(result)
    problem = assemble(result.book.arrays)
    fractions = problem.fractions(solved.shares)
    for order, certificate in enumerate(result.certificate.values()):
        assert certificate["status"] in ("proven", "bounded", "local")
        assert certificate["gap"] == pytest.approx(solved.gap[order], abs=1e-12)
        if certificate["status"] != "proven":
            continue
        assert certificate["gap"] < 1e-7
        assert certificate["kkt_residual"] < 1e-7
        part, at = np.array([order]), problem.layout.owner == order
        if at.sum() > 1:
            assert relative_gap(problem.take(part), fractions[at]) < 1e-7


@given(seeds, urgencies, st.sampled_from([0.1, 0.25, 1.0]))
@settings(max_examples=10, deadline=None)
def test_no_rival_is_better(seed: int, urgency: float, cap: float) -> None:
    """Before rounding, and with it by no more than the certificate's rounding loss."""
    result = _desk(seed, urgency=urgency, max_participation=cap)
    _, ideal = unrounded(result)
    for order, figures in enumerate(result.summary["orders"].values()):
        best = float(ideal.objective[order])
        slack = 1e-7 * (abs(best) + figures["impact"])
        for rival in ("evenly_timed", "volume_proportional"):
            assert best <= figures[rival]["objective"] + slack
        loss = figures["certificate"]["rounding_loss"]
        assert figures["objective"] == pytest.approx(best + loss * abs(best), abs=slack)


def test_more_urgency_costs_more_and_risks_less() -> None:
    """Along a row of urgencies, for every order of the list."""
    orders, market = random_desk(11, most=8)
    figures = [
        unrounded(planned(orders, market, urgency=urgency))[1] for urgency in (0.0, 0.2, 1.0, 5.0)
    ]
    cost = np.array([f.expected_cost for f in figures])
    std = np.array([f.cost_std for f in figures])
    assert (np.diff(cost, axis=0) > -1e-7 * np.abs(cost[1:])).all()
    assert (np.diff(std, axis=0) < 1e-7 * std[1:]).all()
    assert (std[-1] < 0.9 * std[0]).any()


def test_a_list_of_three_hundred_is_three_hundred_plans() -> None:
    """Every third has the slices it has alone, every fiftieth the whole plan."""
    rng = np.random.default_rng(5)
    parts = [random_desk(int(seed), most=1) for seed in rng.integers(0, 2**32, 300)]
    orders = [o | {"order_id": f"o{i}", "symbol": f"T{i}"} for i, ((o,), _) in enumerate(parts)]
    market = [m | {"symbol": f"T{i}"} for i, (_, (m,)) in enumerate(parts)]
    result = planned(orders, market, urgency=0.3)
    together, _ = unrounded(result)
    arrays = result.book.arrays
    for i in range(0, 300, 3):
        here = arrays.stages.layout.owner == i
        shares = schedule(arrays.take(np.array([i]))).shares
        assert np.abs(shares - together.shares[here]).max() < 2e-4 * orders[i]["quantity"]
    for i in range(0, 300, 50):
        one = planned(orders[i], market[i], urgency=0.3)
        apart = slices(one, f"o{i}")["shares"] - slices(result, f"o{i}")["shares"]
        assert apart.abs().max() <= max(2e-4 * orders[i]["quantity"], market[i]["lot_size"])
        figures, listed = row_of(one, f"o{i}"), row_of(result, f"o{i}")
        assert figures["objective"] == pytest.approx(listed["objective"], rel=1e-5)


@given(seeds)
@settings(max_examples=15, deadline=None)
def test_any_plausible_order_is_planned_or_refused(seed: int) -> None:
    """Of any size, cap, window, aim and law: finite figures that add up, or a reason why not."""
    rng = np.random.default_rng(seed)

    def log(low: float, high: float) -> float:
        return float(10.0 ** rng.uniform(low, high))

    adv = log(4.0, 9.0)
    order = task(np.ceil(adv * log(-4.0, 0.3)), side=str(rng.choice(["buy", "sell"])))
    market = name(adv=adv, price=log(-2.0, 4.0), daily_vol=log(-2.5, -0.7))
    market |= {"spread_bps": float(rng.choice([0.0, log(-1.0, 2.0)]))}
    optional = {
        "max_participation": float(rng.choice([0.0, 1.0, log(-2.0, 0.0)])),
        "max_auction_participation": float(rng.choice([0.0, 1.0, log(-2.0, 0.0)])),
        "must_complete": bool(rng.random() < 0.5),
        "min_slice": float(order["quantity"] // 6),
        "start": "11:03",
        "end": "15:20",
    }
    order |= {key: value for key, value in optional.items() if rng.random() < 0.3}
    law = {"relaxation": log(-3.0, 1.0), "impact_exponent": float(rng.uniform(0.3, 1.0))}
    market |= {key: value for key, value in law.items() if rng.random() < 0.3}
    aim = rng.choice(["urgency", "risk_aversion"])
    chosen: dict[str, Any] = {str(aim): float(rng.choice([0.0, log(-2.0, 2.0)]))}
    if aim == "risk_aversion":
        chosen["risk_aversion"] /= order["quantity"] * market["price"]
    if rng.random() < 0.2:
        chosen["finish"] = [Finish(float(rng.uniform(0.05, 1.0)), "14:10:00")]
    if rng.random() < 0.3:
        reading = {"symbol": ["OAKMERE"], "imbalance": [float(rng.uniform(-5.0, 5.0))]}
        chosen["readings"] = pd.DataFrame(reading)
    try:
        result = planned(order, market, **chosen)
    except InfeasibleError as error:
        assert str(error).startswith("order OAKMERE-1: ")  # noqa: PT017
        return
    figures, shares = row_of(result), slices(result)["shares"]
    assert shares.sum() + figures["residual"] == order["quantity"]
    assert all(np.isfinite(figures[key]) for key in ("expected_cost", "cost_std", "objective"))
    assert figures["certificate"]["status"] != "local" or "min_slice" in order


@pytest.mark.parametrize("quantity", [3, 50, 500, 5_000, 50_000])
@pytest.mark.parametrize("urgency", [0.2, 3.0])
def test_the_conic_solver_finds_the_same_objective(quantity: int, urgency: float) -> None:
    """From orders best traded at once, where its own errors are all it can still change."""
    one, other = (
        row_of(planned(task(quantity), name(), urgency=urgency, solver=solver))["objective"]
        for solver in ("interior", "conic")
    )
    assert other == pytest.approx(one, rel=1e-6)
