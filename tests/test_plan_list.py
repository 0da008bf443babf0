"""Orders planned as one list: balances, corridors, where the risk comes from, the certificate."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from scheduler import Plan, plan, read_settings
from scheduler.balances import list_law
from scheduler.solve.joint_certificate import certify
from tests.cli.running import EXAMPLES
from tests.desk import DAY, name, slices, task
from tests.listed import (
    COVARIANCE,
    EXPOSURES,
    GROSS,
    GROUP,
    PRICE,
    QUANTITY,
    RISK,
    SIGNED,
    SYMBOLS,
    TIES,
    corridor,
    listed,
    market,
    rows,
)


@pytest.fixture(scope="module")
def tied() -> Plan:
    """With factors and two corridors that bind."""
    return listed(**RISK, corridors=TIES)


@pytest.fixture(scope="module")
def factors_only() -> Plan:
    return listed(**RISK)


def traded(result: Plan) -> pd.DataFrame:
    """Shares of each order done by the end of each interval: times, by order."""
    frame = result.schedule.pivot_table(
        index="bucket", columns="order_id", values="cumulative", sort=False
    )
    return frame[[f"{symbol}-1" for symbol in SYMBOLS]]


# balances


def test_balances_are_sums_over_the_schedule(tied: Plan) -> None:
    """Bought, sold, cash, gross and net, base currency, at every bucket's end."""
    done = traded(tied).to_numpy()
    frame = tied.balances
    assert frame is not None
    buys = np.maximum(SIGNED, 0.0)
    assert frame["bought"].to_numpy() == pytest.approx(done @ buys)
    assert frame["sold"].to_numpy() == pytest.approx(done @ (buys - SIGNED))
    assert frame["cash"].to_numpy() == pytest.approx(
        (frame["bought"] - frame["sold"]).to_numpy(), abs=1e-6
    )
    left = np.array(QUANTITY) - done
    assert frame["gross"].to_numpy() == pytest.approx(left @ np.abs(SIGNED), abs=1e-6)
    assert frame["net"].to_numpy() == pytest.approx(left @ SIGNED, abs=1e-6)


def test_balances_by_currency_factor_and_group(tied: Plan) -> None:
    """Currencies add up to cash, groups to the net; factors are exposures to what is left."""
    frame = tied.balances
    assert frame is not None
    by_currency = (frame["cash:GBP"] + frame["cash:USD"]).to_numpy()
    assert by_currency == pytest.approx(frame["cash"].to_numpy(), abs=1e-6)
    groups = (frame["group:home"] + frame["group:abroad"]).to_numpy()
    assert groups == pytest.approx(frame["net"].to_numpy(), abs=1e-6)
    left = np.array(QUANTITY) - traded(tied).to_numpy()
    for factor in ("market", "size"):
        expected = left @ (SIGNED * EXPOSURES[factor].to_numpy())
        assert frame[f"factor:{factor}"].to_numpy() == pytest.approx(expected, abs=1e-6)
    abroad = np.array([group == "abroad" for group in GROUP])
    expected = left @ np.where(abroad, SIGNED, 0.0)
    assert frame["group:abroad"].to_numpy() == pytest.approx(expected, abs=1e-6)


def test_in_the_last_row_all_is_traded(tied: Plan) -> None:
    """Nothing is left, and cash is what the orders' values say."""
    frame = tied.balances
    assert frame is not None
    last = frame.iloc[-1]
    kept = [c for c in frame if c.startswith(("gross", "net", "factor:", "group:"))]
    kept = [c for c in kept if not c.endswith(("_lower", "_upper"))]
    assert last[kept].to_numpy(dtype=float) == pytest.approx(0.0, abs=1e-6)
    assert last["cash"] == pytest.approx(float(SIGNED @ QUANTITY))
    assert last["bought"] + last["sold"] == pytest.approx(GROSS)
    assert last["time"] == "2026-03-05T16:00:00-05:00"


def test_without_second_currency_groups_or_factors_there_are_no_such_columns() -> None:
    """Only what the inputs name."""
    plain = [row | {"fx": 1.0, "currency": "USD", "group": ""} for row in market()]
    result = listed(names=plain, corridors=corridor("gross", upper="100%"))
    assert result.balances is not None
    assert [c for c in result.balances if ":" in c] == []


# corridors


def test_corridors_hold_but_for_rounding(tied: Plan) -> None:
    """The summary's excess is the balances' own, and no more than a lot of every name is worth."""
    frame = tied.balances
    assert frame is not None
    excess = tied.summary["total"]["corridor_excess"]
    for measure, share in (("cash", 0.003), ("factor:market", 0.001)):
        lower, upper = frame[f"{measure}_lower"], frame[f"{measure}_upper"]
        assert upper.dropna().to_numpy() == pytest.approx(share * GROSS)
        assert lower.dropna().to_numpy() == pytest.approx(-share * GROSS)
        over = np.maximum(lower - frame[measure], frame[measure] - upper).max()
        assert excess[measure] == pytest.approx(max(over, 0.0), abs=1e-6)
        assert excess[measure] < np.abs(SIGNED).sum() * 1.2


def test_corridors_that_bind_cost(tied: Plan, factors_only: Plan) -> None:
    """More than without them; and they are met at some bucket's end."""
    free, bound = (result.summary["total"] for result in (factors_only, tied))
    assert bound["objective"] > free["objective"] * 1.0002
    for measure, share in (("cash", 0.003), ("factor:market", 0.001)):
        most = []
        for result in (tied, factors_only):
            assert tied.balances is not None
            assert result.balances is not None
            limited = tied.balances[f"{measure}_upper"].notna()
            most.append((result.balances.loc[limited, measure].abs() / GROSS).max())
        assert most[0] == pytest.approx(share, abs=1e-4)
        assert most[1] > share * 1.2


def test_a_loose_corridor_alone_leaves_the_orders_alone() -> None:
    """At one lambda for all: each as if planned by itself, but for a few shares."""
    aim = {"risk_aversion": 1e-6}
    together = listed(aim=aim, corridors=corridor("gross", upper="100%"))
    apart = listed(aim=aim)
    assert apart.balances is None
    moved = (together.schedule["shares"] - apart.schedule["shares"]).abs()
    assert moved.max() <= 3
    total = together.summary["total"]
    assert total["cost_std"] == pytest.approx(total["cost_std_independent"], rel=1e-9)
    assert total["risk_split"]["factors"] == 0.0


def test_the_conic_solver_plans_the_same_list() -> None:
    """Objective and slices, but for a few shares, under corridors that bind; and it is proven."""
    one, other = (
        listed(**RISK, corridors=TIES, aim={"solver": solver, "bucket": 60.0})
        for solver in ("interior", "conic")
    )
    totals = [plan.summary["total"] for plan in (one, other)]
    assert totals[1]["objective"] == pytest.approx(totals[0]["objective"], rel=1e-6)
    assert totals[1]["certificate"]["status"] == "proven"
    assert abs(totals[1]["certificate"]["gap"]) < 1e-6
    moved = (one.schedule["shares"] - other.schedule["shares"]).abs()
    assert moved.max() <= 3


@pytest.mark.parametrize("kind", ["gross", "net", "cash", "group:home", "factor:market"])
def test_every_kind_of_corridor_is_kept(kind: str, factors_only: Plan) -> None:
    """Between 10:30 and 14:00, 0.5 % of the gross within what it comes to when it is free."""
    free = factors_only.balances
    assert free is not None
    times = "2026-03-05T10:30:00-05:00", "2026-03-05T14:00:00-05:00"
    inside = free["time"].between(*times)
    level = free.loc[inside, kind]
    worst = float(level[level.abs().idxmax()])
    sign, bound = np.sign(worst), round(worst - 0.005 * GROSS * np.sign(worst), 2)
    side = "upper" if sign > 0.0 else "lower"
    window = {"from": times[0], "to": times[1]}
    result = listed(**RISK, corridors=corridor(kind, **{side: bound}, **window))
    found = result.balances
    assert found is not None
    assert (found[f"{kind}_{side}"].notna() == inside).all()
    excess = result.summary["total"]["corridor_excess"][kind]
    assert (sign * found.loc[inside, kind]).max() == pytest.approx(sign * bound + excess, abs=200.0)
    assert excess < np.abs(SIGNED).sum()


def test_a_corridor_holds_from_and_to_the_times_given() -> None:
    """Both ends included, and nowhere else."""
    window = {"from": "11:00", "to": "13:00"}
    result = listed(
        **RISK, corridors=corridor("gross", upper="20%", **window), aim={"urgency": 0.01}
    )
    frame = result.balances
    assert frame is not None
    limited = frame.loc[frame["gross_upper"].notna(), "time"]
    assert limited.iloc[0] == "2026-03-05T11:00:00-05:00"
    assert limited.iloc[-1] == "2026-03-05T13:00:00-05:00"
    assert len(limited) == 5
    part = frame.set_index("time")["gross"] / GROSS
    assert part["2026-03-05T11:00:00-05:00"] == pytest.approx(0.2, abs=1e-4)
    assert part["2026-03-05T10:30:00-05:00"] > 0.25


def test_several_corridors_of_one_kind() -> None:
    """Each in its own time; the tighter one counts where they meet."""
    both = pd.concat(
        (
            corridor("gross", upper="60%", **{"from": "10:30", "to": ""}),
            corridor("gross", upper="20%", **{"from": "12:00", "to": "12:30"}),
        )
    )
    result = listed(**RISK, corridors=both, aim={"urgency": 0.01})
    frame = result.balances
    assert frame is not None
    part = (frame["gross"] / GROSS).set_axis(frame["time"].str[11:16])
    assert part["10:30"] <= 0.6001
    assert part["12:00"] == pytest.approx(0.2, abs=1e-4)
    assert frame["gross_upper"].min() == pytest.approx(0.2 * GROSS)
    assert set(result.summary["total"]["corridor_excess"]) == {"gross"}


# risk


def test_the_split_of_risk_adds_up(tied: Plan) -> None:
    """Factors, specific and own imbalance make 1; the factors' parts make the factors'."""
    split = tied.summary["total"]["risk_split"]
    assert split["factors"] + split["specific"] + split["own_imbalance"] == pytest.approx(1.0)
    assert sum(split["by_factor"].values()) == pytest.approx(split["factors"])
    assert set(split["by_factor"]) == {"market", "size"}
    assert min(split["factors"], split["specific"], split["own_imbalance"]) > 0.0


def test_every_order_has_its_part_of_cost_and_risk(tied: Plan, factors_only: Plan) -> None:
    """They add up to one."""
    for result in (tied, factors_only):
        rows = result.summary["orders"].values()
        for part in ("part_of_cost", "part_of_risk"):
            assert sum(row[part] for row in rows) == pytest.approx(1.0, rel=1e-9)
        total = result.summary["total"]["expected_cost"]
        for row in rows:
            assert row["part_of_cost"] == pytest.approx(row["expected_cost"] / total)


def test_deviation_lies_between_none_and_full_dependence(tied: Plan, factors_only: Plan) -> None:
    """A hedged list has less than if its names were independent; on one side, it has more."""
    for result in (tied, factors_only):
        total = result.summary["total"]
        alone = [row["cost_std"] for row in result.summary["orders"].values()]
        assert 0.0 < total["cost_std"] < total["cost_std_fully_dependent"]
        assert total["cost_std_fully_dependent"] == pytest.approx(sum(alone))
        assert total["cost_std"] < total["cost_std_independent"]
    buys = [row | {"side": "buy"} for row in rows()]
    one_sided = listed(buys, **RISK).summary["total"]
    assert one_sided["cost_std"] > one_sided["cost_std_independent"]
    assert one_sided["cost_std"] < one_sided["cost_std_fully_dependent"]


def test_deviation_is_that_of_the_covariance(factors_only: Plan) -> None:
    """int v' Sigma v dh over the rows of the schedule, v the signed values left, plus feedback.

    Sigma = B F B' with the market table's variances on its diagonal; Simpson's rule is exact.
    """
    exposure = EXPOSURES[["market", "size"]].to_numpy()
    covariance = exposure @ COVARIANCE[["market", "size"]].to_numpy() @ exposure.T
    np.fill_diagonal(covariance, 0.02**2)
    after = np.array(QUANTITY) - traded(factors_only).to_numpy()
    before = np.vstack((QUANTITY, after[:-1]))
    share = factors_only.book.grids[0].variance
    variance = 0.0
    for weight, left in ((1, before), (4, (before + after) / 2.0), (1, after)):
        value = SIGNED * left
        variance += float(share @ ((value @ covariance) * value).sum(axis=1)) * weight / 6.0
    variance += float(factors_only.figures.stage_variance[1].sum())
    found = factors_only.summary["total"]["cost_std"]
    assert found == pytest.approx(np.sqrt(variance), rel=1e-9)


def test_quantiles_rise_and_agree_with_the_deviation(tied: Plan) -> None:
    """Symmetric about the expected cost; fat tails: the 99 % one is beyond the normal one."""
    total = tied.summary["total"]
    values = list(total["quantiles"].values())
    assert list(total["quantiles"]) == ["0.05", "0.25", "0.5", "0.75", "0.95", "0.99"]
    assert (np.diff(values) > 0.0).all()
    mean, std = total["expected_cost"], total["cost_std"]
    assert values[2] == pytest.approx(mean, abs=1e-6 * std)
    assert values[0] + values[4] == pytest.approx(2.0 * mean, abs=1e-6 * std)
    assert 1.2 < (values[4] - mean) / std < 1.645
    assert (values[5] - mean) / std > 2.326
    assert total["expected_shortfall_95"] > values[4]


def test_distribution_has_the_variance_of_the_list(tied: Plan) -> None:
    """Energy levels and own imbalance by session add up to the square of the deviation."""
    assert tied.transition is not None
    law = list_law(tied.transition, tied.figures)
    assert float(law.std[0]) == pytest.approx(tied.summary["total"]["cost_std"], rel=1e-12)
    assert law.base.shape == (1, 1)
    split = tied.summary["total"]["risk_split"]
    assert float(law.own.sum()) == pytest.approx(split["own_imbalance"] * law.std[0] ** 2)


def test_other_timings_are_no_better(factors_only: Plan) -> None:
    """Even and volume-proportional slices, by the list's own objective."""
    total = factors_only.summary["total"]
    for timing in ("evenly_timed", "volume_proportional"):
        assert total[timing]["objective"] > total["objective"]


def test_a_history_of_returns_in_place_of_exposures() -> None:
    """Factors are estimated from it; the note says how many, and the risk has their part."""
    pytest.importorskip("sklearn")
    rng = np.random.default_rng(3)
    common = 0.01 * rng.standard_normal((120, 1))
    sample = common * rng.uniform(0.6, 1.4, 6) + 0.008 * rng.standard_normal((120, 6))
    days = pd.bdate_range("2025-09-15", periods=120).strftime("%Y-%m-%d")
    history = pd.DataFrame({"date": days} | dict(zip(SYMBOLS, sample.T, strict=True)))
    result = listed(returns=history)
    assert any("1 statistical factors from 120 days" in note for note in result.notes)
    split = result.summary["total"]["risk_split"]
    assert 0.0 < split["factors"] < 1.0
    assert result.balances is not None
    assert "factor:statistical-1" in result.balances


# the certificate and the schedule


def test_the_list_is_proven_and_says_so_on_every_order(tied: Plan) -> None:
    """One certificate: gap and KKT below 1e-7, the same for all."""
    one = tied.summary["total"]["certificate"]
    assert one["status"] == "proven"
    assert abs(one["gap"]) < 1e-7
    assert one["kkt_residual"] < 1e-7
    assert one["names_not_convex"] == 0
    assert abs(one["rounding_loss"]) < 1e-4
    for certificate in tied.certificate.values():
        assert certificate["status"] == "proven"
        assert certificate["gap"] == one["gap"]


def test_slices_are_whole_and_complete_within_the_caps(tied: Plan) -> None:
    """As for orders planned alone."""
    frame = tied.schedule
    assert (frame["shares"] >= 0).all()
    assert frame.groupby("order_id")["shares"].sum().to_dict() == {
        f"{symbol}-1": quantity for symbol, quantity in zip(SYMBOLS, QUANTITY, strict=True)
    }
    cap = frame["kind"].map({"continuous": 0.25, "auction": 0.10})
    most = frame["expected_volume"] * cap / (1.0 - cap)
    assert (frame["shares"] < most + 1.0).all()


def test_the_order_of_rows_does_not_matter(tied: Plan) -> None:
    """Orders and market the other way round: the same slices, but for a share."""
    turned = listed(rows()[::-1], market()[::-1], **RISK, corridors=TIES[::-1])
    for symbol in SYMBOLS:
        here, there = (slices(result, f"{symbol}-1")["shares"] for result in (tied, turned))
        assert (here - there).abs().max() <= 1


def test_a_more_urgent_list_is_dearer_and_less_risky() -> None:
    """Along the frontier; the implied lambda is U over twice the deviation."""
    totals = [listed(aim={"urgency": u}, **RISK).summary["total"] for u in (0.1, 0.5, 2.0)]
    costs = [total["expected_cost"] for total in totals]
    assert costs == sorted(costs)
    stds = [total["cost_std"] for total in totals]
    assert stds == sorted(stds, reverse=True)
    for urgency, total in zip((0.1, 0.5, 2.0), totals, strict=True):
        assert total["risk_aversion"] == pytest.approx(
            urgency / (2.0 * total["cost_std"]), rel=1e-3
        )


def test_windows_of_their_own() -> None:
    """A name that may not trade before 11:00 does not, and is done by 15:00; others are."""
    orders = rows()
    orders[0] |= {"start": "11:00", "end": "15:00"}
    result = listed(orders, **RISK, corridors=corridor("cash", "-25%", "25%"))
    own = slices(result, "OAK-1")
    own = own[own["shares"] > 0]
    assert own["start"].iat[0] >= "2026-03-05T11:00:00-05:00"
    assert own["end"].iat[-1] <= "2026-03-05T15:00:00-05:00"
    assert own["shares"].sum() == QUANTITY[0]
    assert result.balances is not None
    assert result.balances["time"].iat[0] == "2026-03-05T09:30:00-05:00"
    waiting = result.balances["cash:USD"].iloc[:3]
    others = slices(result, "BAY-1")["cumulative"].to_numpy()[:3] * PRICE[5]
    others -= slices(result, "ELM-1")["cumulative"].to_numpy()[:3] * PRICE[1]
    others -= slices(result, "FIR-1")["cumulative"].to_numpy()[:3] * PRICE[3]
    assert waiting.to_numpy() == pytest.approx(others)


def test_a_name_with_a_window_of_one_bucket() -> None:
    """It has no choice; the rest of the list is planned around it."""
    orders = rows()
    orders[2] |= {"start": "12:00", "end": "12:30", "quantity": 3_000}
    result = listed(orders, **RISK, corridors=corridor("cash", "-25%", "25%"))
    own = slices(result, "ASH-1")
    assert own.loc[own["shares"] > 0, "shares"].tolist() == [3_000]
    assert result.summary["total"]["certificate"]["status"] == "proven"


@pytest.mark.parametrize("corridors", [None, corridor("group:abroad", "-20%", "20%")])
def test_a_name_that_its_caps_leave_no_choice(corridors: pd.DataFrame | None) -> None:
    """Caps that add up to just the quantity: all of them are used."""
    one = name("ELM", price=64.5, profile="flat", adv=1_300_000)
    names = [one if row["symbol"] == "ELM" else row for row in market(profile="flat")]
    orders = rows()
    # 13 buckets of 100,000 shares at a fifth of the total: 25,000 each
    orders[1] |= {"quantity": 325_000, "max_participation": 0.2}
    result = listed(orders, names, **RISK, corridors=corridors)
    assert slices(result, "ELM-1")["shares"].tolist() == [25_000] * 13


@pytest.mark.parametrize("bound", ["0", "0%"])
def test_a_corridor_without_width(bound: str) -> None:
    """Two names of one value on both sides may be asked to leave no cash at all."""
    orders = [task(10_000, symbol="OAK"), task(10_000, symbol="ELM", side="sell")]
    names = [name("OAK"), name("ELM", daily_vol=0.03)]
    result = listed(orders, names, corridors=corridor("cash", bound, bound))
    assert (slices(result, "OAK-1")["shares"] - slices(result, "ELM-1")["shares"]).abs().max() <= 2


def test_soften_changes_nothing_where_all_is_kept(tied: Plan) -> None:
    """No note, the same slices."""
    result = listed(**RISK, corridors=TIES, soften=True)
    assert result.schedule["shares"].tolist() == tied.schedule["shares"].tolist()
    assert not [note for note in result.notes if note.startswith("softened")]


# the example


def test_the_transition_of_the_examples() -> None:
    """400 names in two currencies, New York and London: proven, within its corridors."""
    folder = EXAMPLES / "transition"
    tables = ("exposures", "factor_covariance", "corridors")
    result = plan(
        folder / "orders.csv",
        folder / "market.csv",
        **{key: folder / f"{key}.csv" for key in tables},
        settings=read_settings(folder / "settings.toml"),
        date=DAY,
        at="2026-03-05T08:00Z",
    )
    total = result.summary["total"]
    assert total["orders"] == 400
    assert total["certificate"]["status"] == "proven"
    assert abs(total["certificate"]["gap"]) < 1e-7
    assert max(total["corridor_excess"].values()) < 1e-4 * total["notional"]
    assert result.balances is not None
    inside = result.balances[:-1]
    for measure in ("cash", "factor:market"):
        bound = 0.04 * total["notional"]
        assert inside[measure].abs().max() <= bound + total["corridor_excess"][measure] + 1.0
    last = result.balances.iloc[-1]
    assert last["gross"] == pytest.approx(0.0, abs=1e-3)
    assert total["cost_std"] < total["cost_std_independent"]
    asked = pd.read_csv(folder / "orders.csv").set_index("order_id")["quantity"]
    done = result.schedule.groupby("order_id")["shares"].sum()
    assert (done.loc[asked.index] == asked).all()


def test_a_shift_of_the_certificate_is_noticed(tied: Plan) -> None:
    """A schedule with a part of one slice moved to another has a gap that shows it."""
    transition = tied.transition
    assert transition is not None
    problem, coupling = transition.problem, transition.coupling
    y = problem.fractions(tied.figures.shares)
    moved = y.copy()
    moved[2], moved[8] = y[2] + 0.5 * y[8], 0.5 * y[8]
    aim = {"urgency": 0.5}
    loose = replace(
        coupling,
        lower=np.full_like(coupling.lower, -np.inf),
        upper=np.full_like(coupling.upper, np.inf),
    )
    assert certify(problem, loose, moved, **aim).gap > 1e-4
