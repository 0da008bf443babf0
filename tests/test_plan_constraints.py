"""Constraints on slices: kept by orders alone and by lists, rounded with a note, refused."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from scheduler import InfeasibleError, InputError, MisuseError, Plan
from tests.cli.running import Put, run
from tests.desk import name, planned, slices, task
from tests.listed import GROSS, RISK, SIGNED, SYMBOLS, corridor, listed
from tests.samples import csv_text

CONIC = {"solver": "conic", "bucket": 60.0}


def limit(
    buckets: list[int],
    *,
    order: str = "OAKMERE-1",
    coefficient: list[float] | None = None,
    label: str = "limit",
    **sides: float,
) -> pd.DataFrame:
    """One constraint on an order: its limits in its first row only."""
    frame = pd.DataFrame(
        {
            "name": label,
            "order_id": order,
            "bucket": buckets,
            "coefficient": coefficient or [1.0] * len(buckets),
        }
    )
    for side, value in sides.items():
        frame[side] = [value] + [np.nan] * (len(buckets) - 1)
    return frame


def one(constraints: pd.DataFrame | None = None, **options: Any) -> Plan:
    return planned(task(), name(), constraints=constraints, **(CONIC | options))


# orders alone


def test_constraints_of_one_order_are_kept_and_cost() -> None:
    """A sum from below, a difference from above; with its multipliers the optimum is proven."""
    free = slices(one())["shares"]
    table = pd.concat(
        [
            limit([5, 6], lower=9_000.0, label="late"),
            limit([2, 3], coefficient=[1.0, -1.0], upper=100.0, label="even start"),
        ]
    )
    assert free[4:6].sum() < 8_000
    assert free[1] - free[2] > 5_000
    result = one(table)
    shares = slices(result)["shares"]
    assert shares[4:6].sum() >= 9_000 - 1
    assert shares[1] - shares[2] <= 100 + 1
    assert shares.sum() == 20_000
    certificate = result.certificate["OAKMERE-1"]
    assert certificate["status"] == "proven"
    assert abs(certificate["gap"]) < 1e-6
    assert (
        result.summary["orders"]["OAKMERE-1"]["objective"]
        > one().summary["orders"]["OAKMERE-1"]["objective"]
    )


def test_a_constraint_that_is_a_finish_gives_what_finish_gives() -> None:
    """16,000 of 20,000 by 12:30, said both ways."""
    by_row = one(limit([1, 2, 3, 4], lower=16_000.0))
    by_finish = planned(task(), name(), bucket=60.0, finish="0.8@12:30")
    both = [slices(result)["shares"] for result in (by_row, by_finish)]
    assert both[0][:4].sum() == pytest.approx(16_000, abs=1)
    assert (both[0] - both[1]).abs().max() <= 2


def test_each_order_keeps_its_own() -> None:
    """The second of two; the first is planned as without."""
    orders = [task(symbol=symbol) for symbol in "AB"]
    market = [name(symbol) for symbol in "AB"]
    table = limit([7], order="B-1", upper=500.0)
    free, kept = (planned(orders, market, constraints=c, **CONIC) for c in (None, table))
    assert slices(free, "A-1")["shares"].equals(slices(kept, "A-1")["shares"])
    assert slices(free, "B-1")["shares"].iat[6] > 900
    assert slices(kept, "B-1")["shares"].iat[6] <= 500


def test_whole_lots_that_break_a_constraint_are_told() -> None:
    """Lots of 1,000 cannot keep a slice at 1,500 shares; lots of 1 can."""
    exact = limit([3], lower=1_500.0, upper=1_500.0)
    result = planned(task(), name(lot_size=1_000), constraints=exact, **CONIC)
    assert slices(result)["shares"].iat[2] in (1_000, 2_000)
    assert "constraint limit: whole lots miss it by 500" in result.notes
    fine = one(exact)
    assert slices(fine)["shares"].iat[2] == pytest.approx(1_500, abs=1)
    assert not any("by 500" in note for note in fine.notes)


# lists


def test_constraints_across_the_names_of_a_list() -> None:
    """Money in the first hour, bought less sold, fixed at nothing; as a corridor would have it."""
    tables = [
        limit([1, 2], order=f"{s}-1", coefficient=[v, v], label="cash", lower=0.0, upper=0.0)
        for s, v in zip(SYMBOLS, SIGNED, strict=True)
    ]
    free = listed(**RISK).balances
    conic = listed(**RISK, constraints=pd.concat(tables), aim={"solver": "conic"})
    kept = conic.balances
    assert free is not None
    assert kept is not None
    assert abs(free["cash"].iat[1]) > 1e-3 * GROSS
    assert abs(kept["cash"].iat[1]) <= 2 * np.abs(SIGNED).max()
    window = {"from": "10:29", "to": "10:31"}
    tied = listed(**RISK, corridors=corridor("cash", 0, 0, **window))
    totals = [plan.summary["total"] for plan in (conic, tied)]
    assert totals[0]["objective"] == pytest.approx(totals[1]["objective"], rel=1e-4)
    assert totals[0]["certificate"]["status"] == "proven"
    assert abs(totals[0]["certificate"]["gap"]) < 1e-6


# refusals


def test_only_the_conic_solver_keeps_constraints() -> None:
    """The message says what to add, for orders and lists alike."""
    for ties in ({}, RISK):
        with pytest.raises(MisuseError, match="add --solver conic"):
            listed(**ties, constraints=limit([1], order="OAK-1", upper=1.0))


def test_constraints_that_clash_are_named() -> None:
    """Nearly all in the opening auction is more than the cap there."""
    with pytest.raises(InfeasibleError, match="constraint 'rush' clashes"):
        one(limit([1], lower=19_999.0, label="rush"), max_participation=0.05)


def test_an_order_without_a_choice_is_checked_too() -> None:
    """It may complete only in its one bucket, which a constraint forbids."""
    order = task(start="10:30", end="11:30")
    with pytest.raises(InfeasibleError, match=r"constraint 'limit' clashes.*missed by 19000"):
        planned(order, name(), constraints=limit([1], upper=1_000.0), **CONIC)
    fine = planned(order, name(), constraints=limit([1], lower=1_000.0), **CONIC)
    assert slices(fine)["shares"].sum() == 20_000


@pytest.mark.parametrize("second", [{}, {"start": "10:30", "end": "11:30"}])
def test_constraints_across_orders_planned_alone_are_refused(second: dict[str, str]) -> None:
    """With the remedy; also where one of the orders has no choice."""
    orders = [task(symbol="A"), task(symbol="B", **second)]
    table = pd.concat([limit([1], order=f"{symbol}-1", upper=5.0) for symbol in "AB"])
    with pytest.raises(MisuseError, match="'limit' covers buckets of several orders") as caught:
        planned(orders, [name("A"), name("B")], constraints=table, **CONIC)
    assert "as one list" in str(caught.value)


def test_buckets_that_an_order_does_not_have_are_refused() -> None:
    """Seven hours or parts of them and two auctions; a tenth bucket is named with its row."""
    with pytest.raises(InputError) as caught:
        one(limit([9, 10], upper=1.0))
    (problem,) = caught.value.problems
    assert (problem.row, problem.column, problem.value) == (3, "bucket", "10.0")
    assert problem.rule == "is beyond the 9 buckets of order OAKMERE-1"


def test_orders_that_share_a_symbol_are_refused() -> None:
    """They are solved as one total; a constraint on another order beside them is kept."""
    orders = [task(), task(order_id="OAKMERE-2"), task(symbol="B")]
    names = [name(), name("B")]
    with pytest.raises(InputError, match="solved as one total with others of its symbol"):
        planned(orders, names, constraints=limit([7], upper=500.0), **CONIC)
    beside = planned(orders, names, constraints=limit([7], order="B-1", upper=500.0), **CONIC)
    assert slices(beside, "B-1")["shares"].iat[6] <= 500


def test_min_slice_and_constraints_exclude_each_other() -> None:
    with pytest.raises(MisuseError, match="min_slice and constraints"):
        planned(task(min_slice=100), name(), constraints=limit([1], upper=1.0), **CONIC)


# the command


def test_on_the_command_line(put: Put, tmp_path: Path) -> None:
    """Refused without the conic solver, nothing written; kept with it."""
    tables = {"orders": pd.DataFrame([task()]), "market": pd.DataFrame([name()])}
    files = {key: put(f"{key}.csv", csv_text(table.astype(str))) for key, table in tables.items()}
    table = limit([5, 6], lower=9_000.0)
    files["constraints"] = put("constraints.csv", table.to_csv(index=False))
    out = tmp_path / "out"
    words = [files["orders"], "--market", files["market"], "--out", out]
    words += ["--constraints", files["constraints"], "--bucket", "60"]
    words += ["--date", "2026-03-05", "--at", "09:30"]
    refused = run(*words)
    assert refused.exit_code == 2
    assert "add --solver conic" in refused.stderr
    assert not out.exists()
    assert run(*words, "--solver", "conic").exit_code == 0
    assert pd.read_csv(out / "schedule.csv")["shares"][4:6].sum() >= 9_000 - 1
