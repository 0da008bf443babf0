"""Orders planned as one list: balances, corridors, where the risk comes from, what is refused."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import Result

from scheduler import Finish, InfeasibleError, InputError, MisuseError, Plan, plan, read_settings
from scheduler.balances import list_law
from scheduler.settings import Settings
from tests.cli.running import EXAMPLES, Put, run
from tests.desk import DAY, Row, name, slices, task
from tests.samples import csv_text

SYMBOLS = ("OAK", "ELM", "ASH", "FIR", "YEW", "BAY")
SIDES = ("buy", "sell", "buy", "sell", "sell", "buy")
QUANTITY = (40_000, 30_000, 5_000, 50_000, 6_000, 26_000)
PRICE = (50.0, 64.5, 120.0, 21.4, 88.0, 33.3)
FX = (1.0, 1.0, 1.25, 1.0, 1.25, 1.0)
GROUP = ("home", "home", "abroad", "home", "abroad", "home")
EXPOSURES = pd.DataFrame(
    {
        "symbol": SYMBOLS,
        "market": [1.1, 0.9, 1.0, 1.2, 0.8, 1.0],
        "size": [0.2, -0.4, 0.9, 0.0, -1.1, 0.5],
    }
)
COVARIANCE = pd.DataFrame(
    {"factor": ["market", "size"], "market": [1.2e-4, -1e-5], "size": [-1e-5, 3e-5]}
)
RISK = {"exposures": EXPOSURES, "factor_covariance": COVARIANCE}
SIGNED = np.array([1 if side == "buy" else -1 for side in SIDES]) * np.array(FX) * PRICE
GROSS = float(np.abs(SIGNED) @ QUANTITY)


def rows(**columns: Any) -> list[Row]:
    """Six orders; columns of the orders table for all of them."""
    return [
        task(quantity, symbol=symbol, side=side) | columns
        for symbol, side, quantity in zip(SYMBOLS, SIDES, QUANTITY, strict=True)
    ]


def market(**columns: Any) -> list[Row]:
    """Their market: two currencies and two groups on one exchange, half-hour buckets."""
    return [
        name(
            symbol,
            price=price,
            fx=fx,
            currency="USD" if fx == 1.0 else "GBP",
            group=group,
            spread_bps=4,
        )
        | columns
        for symbol, price, fx, group in zip(SYMBOLS, PRICE, FX, GROUP, strict=True)
    ]


def settings_of(**values: Any) -> Settings:
    chosen = {"bucket": 30.0, "urgency": 0.5} | values
    if "risk_aversion" in chosen or "risk_budget" in chosen or "cost_budget" in chosen:
        del chosen["urgency"]
    return Settings().with_values("cost", base_currency="USD").with_values("plan", **chosen)


def listed(
    orders: list[Row] | None = None,
    names: list[Row] | None = None,
    *,
    aim: dict[str, Any] | None = None,
    **options: Any,
) -> Plan:
    """The list's plan; settings of the section [plan] as `aim`."""
    frames = pd.DataFrame(orders or rows()), pd.DataFrame(names or market())
    options = {"settings": settings_of(**(aim or {}))} | options
    return plan(*frames, date=DAY, at="09:30", **options)


def corridor(kind: str, lower: Any = "", upper: Any = "", **window: str) -> pd.DataFrame:
    return pd.DataFrame([{"kind": kind, "lower": lower, "upper": upper, **window}])


TIES = pd.DataFrame(
    {
        "kind": ["cash", "factor:market"],
        "lower": ["-0.3%", "-0.1%"],
        "upper": ["0.3%", "0.1%"],
        "from": ["", "10:30"],
        "to": ["15:00", ""],
    }
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


def test_names_keep_their_own_deviation(factors_only: Plan) -> None:
    """The diagonal is the market table's: an order's own figures know nothing of the others."""
    book = factors_only.book
    own = factors_only.figures.cost_std
    assert (book.arrays.specific if isinstance(book.arrays.specific, float) else 1.0) == 1.0
    for order, std in zip(book.names, own, strict=True):
        assert factors_only.summary["orders"][order]["cost_std"] == pytest.approx(float(std))


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


# what cannot be kept


def _refused(**options: Any) -> str:
    with pytest.raises(InfeasibleError) as caught:
        listed(**RISK, **options)
    return str(caught.value)


def test_a_corridor_that_no_schedule_keeps_is_named() -> None:
    """Which, when, its bounds, and the least amount by which it must give: with more it is kept."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    text = _refused(corridors=asked)
    assert "corridor gross: no schedule keeps [-inf, " in text
    assert "2026-03-05T09:30:00-05:00" in text
    assert "use --soften" in text
    amount = float(text.split("by at least ")[1].split()[0].replace(",", ""))
    assert 0.5 * GROSS < amount < 0.9 * GROSS
    for extra, kept in ((-100.0, False), (100.0, True)):
        upper = 0.1 * GROSS + amount + extra
        again = corridor("gross", upper=f"{upper:.2f}", **{"from": "", "to": "09:30"})
        if kept:
            listed(**RISK, corridors=again)
        else:
            assert "corridor gross: no schedule keeps" in _refused(corridors=again)


def test_softened_corridors_give_way_by_the_least() -> None:
    """A note for each, the schedule complete, the excess as the refusal announced it."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    refused = _refused(corridors=asked)
    amount = float(refused.split("by at least ")[1].split()[0].replace(",", ""))
    result = listed(**RISK, corridors=asked, soften=True)
    notes = [note for note in result.notes if note.startswith("softened: corridor gross")]
    assert len(notes) == 1
    excess = result.summary["total"]["corridor_excess"]["gross"]
    assert excess == pytest.approx(amount, abs=np.abs(SIGNED).sum())
    assert result.schedule.groupby("order_id")["shares"].sum().sum() == sum(QUANTITY)


def test_soften_changes_nothing_where_all_is_kept(tied: Plan) -> None:
    """No note, the same slices."""
    result = listed(**RISK, corridors=TIES, soften=True)
    assert result.schedule["shares"].tolist() == tied.schedule["shares"].tolist()
    assert not [note for note in result.notes if note.startswith("softened")]


@pytest.mark.parametrize(
    ("kind", "side", "value"),
    [("cash", "upper", SIGNED @ QUANTITY), ("net", "lower", 0.0), ("gross", "lower", 0.0)],
)
def test_a_corridor_that_excludes_its_final_value_is_refused_with_it(
    kind: str, side: str, value: float
) -> None:
    """When all is traded nobody can change it."""
    beyond = value - 5_000.0 if side == "upper" else value + 5_000.0
    text = _refused(corridors=corridor(kind, **{side: beyond}), soften=True)
    assert f"corridor {kind}: at 2026-03-05T16:00:00-05:00 it is {value:,.0f}" in text
    assert "whatever the schedule" in text
    free = corridor(kind, **{side: beyond}, **{"from": "", "to": "14:00"})
    listed(**RISK, corridors=free, soften=True)


# combinations that are not there yet


@pytest.mark.parametrize(
    ("columns", "options", "what"),
    [
        ({"must_complete": "false"}, {}, "must_complete=false"),
        ({"min_slice": 100}, {}, "min_slice"),
        ({}, {"finish": [Finish(0.5, "12:00:00")]}, "finish"),
        ({}, {"aim": {"risk_budget": 50.0}}, "risk_budget"),
        ({}, {"aim": {"cost_budget": 50.0}}, "cost_budget"),
        ({}, {"aim": {"solver": "conic"}}, "solver conic"),
    ],
)
@pytest.mark.parametrize("tie", [RISK, {"corridors": corridor("cash", "-50%", "50%")}])
def test_unsupported_combinations_are_refused(
    columns: Row, options: dict[str, Any], what: str, tie: dict[str, pd.DataFrame]
) -> None:
    """Named, with what to do; the same orders alone are planned."""
    with pytest.raises(MisuseError, match=f"{what}.* cannot be combined") as caught:
        listed(rows(**columns), **tie, **options)
    assert "plan these orders alone" in str(caught.value)


def test_risk_tables_that_do_not_fit() -> None:
    """Exposures without a covariance, or beside a history of returns; a factor of one only."""
    with pytest.raises(MisuseError, match="belong together"):
        listed(exposures=EXPOSURES)
    with pytest.raises(MisuseError, match="not both"):
        listed(**RISK, returns=EXPOSURES)
    with pytest.raises(InputError, match="is no factor of the factor_covariance"):
        listed(exposures=EXPOSURES.assign(value=0.5), factor_covariance=COVARIANCE)
    with pytest.raises(InputError, match="names no known group"):
        listed(**RISK, corridors=corridor("group:nowhere", "-5%", "5%"))
    with pytest.raises(InputError, match="names no known factor"):
        listed(corridors=corridor("factor:market", "-5%", "5%"))


# the command


@pytest.fixture
def files(put: Put) -> dict[str, str]:
    tables = {"orders": rows(), "market": market()}
    frames = {key: pd.DataFrame(table) for key, table in tables.items()}
    frames |= {"exposures": EXPOSURES, "factor-covariance": COVARIANCE}
    return {key: put(f"{key}.csv", csv_text(frame.astype(str))) for key, frame in frames.items()}


def _run(files: dict[str, str], *more: object) -> Result:
    named = [word for key in files if key != "orders" for word in (f"--{key}", files[key])]
    when = ("--date", "2026-03-05", "--at", "09:30", "--bucket", "30")
    return run(files["orders"], *named, *when, *more)


@pytest.fixture
def base(put: Put) -> tuple[str, str]:
    return ("--settings", put("settings.toml", '[cost]\nbase_currency = "USD"\n'))


def test_the_command_writes_balances_too(
    files: dict[str, str], put: Put, base: tuple[str, str], tmp_path: Path
) -> None:
    """Beside schedule and summary, as CSV or Parquet; a plan of orders alone takes them away."""
    corridors = put("corridors.csv", csv_text(corridor("cash", "-5%", "5%")))
    out = tmp_path / "out"
    result = _run(files | {"corridors": corridors}, *base, "--out", out)
    assert result.exit_code == 0
    assert sorted(p.name for p in out.iterdir()) == ["balances.csv", "schedule.csv", "summary.json"]
    frame = pd.read_csv(out / "balances.csv")
    assert frame["gross"].iat[-1] == pytest.approx(0.0, abs=1e-6)
    summary = json.loads((out / "summary.json").read_text())
    assert summary["total"]["certificate"]["status"] == "proven"
    assert _run(files, *base, "--out", out, "--parquet").exit_code == 0
    written = sorted(p.name for p in out.iterdir())
    assert written == ["balances.parquet", "schedule.parquet", "summary.json"]
    alone = {key: files[key] for key in ("orders", "market")}
    assert _run(alone, *base, "--out", out).exit_code == 0
    assert sorted(p.name for p in out.iterdir()) == ["schedule.csv", "summary.json"]


def test_the_command_refuses_and_softens(
    files: dict[str, str], put: Put, base: tuple[str, str], tmp_path: Path
) -> None:
    """Exit status 1, nothing written; with --soften 0, and the note on standard error."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    tables = files | {"corridors": put("corridors.csv", csv_text(asked))}
    out = tmp_path / "out"
    refused = _run(tables, *base, "--out", out)
    assert refused.exit_code == 1
    assert refused.stdout == ""
    assert not out.exists()
    assert "corridor gross: no schedule keeps" in refused.stderr
    assert "2026-03-05T09:30:00-05:00" in refused.stderr
    assert "Traceback" not in refused.stderr
    softened = _run(tables, *base, "--out", out, "--soften")
    assert softened.exit_code == 0
    assert "Note: softened: corridor gross" in softened.stderr
    assert (out / "balances.csv").exists()


BAD = {
    "a symbol without exposures": ("exposures", EXPOSURES[:-1], "BAY"),
    "a factor without covariance": ("factor-covariance", COVARIANCE.iloc[:1, :2], "size"),
    "an exposure that is no number": ("exposures", EXPOSURES.replace(1.1, "high"), "high"),
    "a kind of corridor there is not": ("corridors", corridor("cahs", upper="5%"), "cahs"),
    "a corridor without sides": ("corridors", corridor("cash"), "no limit on either side"),
    "a corridor turned over": ("corridors", corridor("cash", "5%", "-5%"), "above upper"),
    "a factor nobody knows": ("corridors", corridor("factor:beta", "0", "1"), "beta"),
    "a time that is none": ("corridors", corridor("cash", "0", **{"from": "noon"}), "noon"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_tables_of_a_list(
    case: str, files: dict[str, str], put: Put, base: tuple[str, str], tmp_path: Path
) -> None:
    """Exit status 2, the place named, nothing written."""
    table, frame, word = BAD[case]
    tables = files | {table: put(f"bad-{table}.csv", csv_text(frame.astype(str)))}
    out = tmp_path / "out"
    result = _run(tables, *base, "--out", out)
    assert result.exit_code == 2
    assert not out.exists()
    assert word in result.stderr
    assert f"bad-{table}.csv" in result.stderr
    assert "Traceback" not in result.stderr


def test_unsupported_on_the_command_line(
    files: dict[str, str], base: tuple[str, str], tmp_path: Path
) -> None:
    """Exit status 2 and nothing written."""
    out = tmp_path / "out"
    for more in (("--finish", "0.5@12:00"), ("--risk-budget", "50"), ("--solver", "conic")):
        result = _run(files, *base, "--out", out, *more)
        assert result.exit_code == 2
        assert "cannot be combined" in result.stderr
        assert not out.exists()


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
    from scheduler.solve.joint_certificate import certify

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
