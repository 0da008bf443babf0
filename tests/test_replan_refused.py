"""What a re-plan refuses: fills that cannot be, times and tables that do not fit."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from scheduler import InfeasibleError, InputError, MisuseError, replan
from tests.desk import name, planned, table, task

AT = "2026-03-05T12:00:00-05:00"
FILL = {"order_id": "OAKMERE-1", "time": "10:05", "quantity": 1000, "price": 50.1}
PLAN = planned([task(60_000), task(8_000, symbol="FELL")], [name(), name("FELL")], bucket=30.0)


def refused(*rows: dict[str, Any], **options: Any) -> str:
    with pytest.raises(InputError) as caught:
        replan(PLAN, pd.DataFrame([FILL | row for row in rows]), at=AT, **options)
    return str(caught.value)


@pytest.mark.parametrize(
    ("row", "said"),
    [
        ({"order_id": "HB-9"}, "row 2, column order_id: is no order of the plan, got 'HB-9'"),
        ({"time": "12:01"}, "row 2, column time: is after 2026-03-05T17:00:00+00:00"),
        ({"time": "09:29"}, "row 2, column time: is before its order's time in the plan"),
        ({"quantity": 0.5}, "row 2, column quantity: is a fraction of a share"),
        ({"time": "2026-03-08T02:30"}, "does not exist on 2026-03-08"),
        ({"quantity": 61_000}, "is less than the 61,000 shares filled of the order"),
    ],
)
def test_fills_that_cannot_be(row: dict[str, Any], said: str) -> None:
    assert said in refused(row)


def test_a_repeated_row_is_refused_and_one_told_apart_is_not() -> None:
    assert "row 3, column order_id: repeats row 2 in every cell" in refused({}, {})
    rows = pd.DataFrame([FILL | {"venue": "XNYS"}, FILL | {"venue": "ARCX"}])
    assert replan(PLAN, rows, at=AT).progress["done"].tolist() == [2000.0, 0.0]


def test_fills_outside_the_hours_of_their_order_are_counted_and_said() -> None:
    """Before the window of one of two orders of a symbol; after the close."""
    orders = [task(9_000, order_id="a"), task(9_000, order_id="b", start="11:00")]
    shared = planned(orders, name(), bucket=30.0)
    rows = [{"order_id": "b", "time": "10:05"}, {"order_id": "a", "time": "10:05"}]
    result = replan(shared, pd.DataFrame([FILL | row for row in rows]), at=AT)
    assert "b: 1 of 1 fills came outside its hours in the plan; they are counted" in result.notes
    assert not any(note.startswith("a: ") for note in result.notes)
    assert result.progress["done"].tolist() == [1000.0, 1000.0]
    late = replan(PLAN, pd.DataFrame([FILL | {"time": "16:20"}]), at="16:30")
    assert "OAKMERE-1: 1 of 1 fills came outside its hours in the plan; they are counted" in (
        late.notes
    )


def test_every_problem_at_once() -> None:
    text = refused({"time": "12:01"}, {"time": "09:29"})
    assert "row 2" in text
    assert "row 3" in text


def test_an_order_that_became_another() -> None:
    other = [task(60_000, side="sell"), task(8_000, symbol="FELL")]
    assert "is not the side that the order has in the plan" in refused({}, orders=table(other))


def test_tables_that_do_not_fit_together() -> None:
    both = [task(60_000), task(8_000, symbol="ELM")]
    assert "is not in the market table" in refused({}, orders=table(both))


def test_times() -> None:
    with pytest.raises(MisuseError, match="is before the plan's own time"):
        replan(PLAN, None, at="09:00")
    with pytest.raises(MisuseError, match="at must be text"):
        replan(PLAN, None, at=12)  # type: ignore[arg-type]


def test_an_auction_at_the_very_instant() -> None:
    """Whether it is over or still to come cannot be both."""
    with pytest.raises(MisuseError, match=r"fills of the auction at .* plan it a second later"):
        replan(PLAN, pd.DataFrame([FILL | {"time": "09:30"}]), at="09:30")


def test_a_rest_that_its_caps_do_not_let_complete() -> None:
    """The error is that of `plan`, in shares of the rest."""
    tight = planned(task(60_000, end="12:30"), name(), bucket=30.0)
    with pytest.raises(InfeasibleError, match=r"of 59,000 shares can trade in its window"):
        replan(tight, pd.DataFrame([FILL]), at="12:15")


def test_constraints_are_of_the_buckets_of_the_rest() -> None:
    """Those of the plan speak of its own; new ones need the solver that keeps them."""
    rule = pd.DataFrame(
        {"name": ["c"], "order_id": ["OAKMERE-1"], "bucket": [3], "coefficient": [1.0]}
    ).assign(lower=np.nan, upper=900.0)
    free = planned(task(60_000), name(), bucket=60.0, urgency=0.3, solver="conic")
    kept = planned(task(60_000), name(), bucket=60.0, urgency=0.3, solver="conic", constraints=rule)
    with pytest.raises(MisuseError, match="which speak of its numbered buckets"):
        replan(kept, None, at="10:30")
    with pytest.raises(MisuseError, match="only the conic solver keeps constraints"):
        replan(PLAN, None, at="10:30", constraints=rule)
    for first in (free, kept):
        result = replan(first, None, at="10:30", constraints=rule)
        assert result.plan is not None
        assert result.plan.schedule["shares"].iloc[2] <= 900
        assert "orders and limits" in set(result.attribution["change"])
    done = pd.DataFrame([FILL | {"quantity": 60_000}])
    assert replan(free, done, at="10:30", constraints=rule).plan is None
    two = planned(
        [task(60_000), task(8_000, symbol="FELL")], [name(), name("FELL")], solver="conic"
    )
    result = replan(two, done, at="10:30", constraints=rule)  # of an order that is complete
    assert result.plan is not None
    assert result.plan.book.names == ["FELL-1"]


def test_a_re_plan_in_memory_is_not_planned_again() -> None:
    rest = replan(PLAN, None, at="10:30").plan
    assert rest is not None
    with pytest.raises(MisuseError, match="is itself a re-plan"):
        replan(rest, None, at="11:00")


def test_settings_with_two_aims() -> None:
    two = PLAN.book.settings.with_values("plan", urgency=1.0, risk_aversion=1e-6)
    with pytest.raises(MisuseError, match="exclude each other"):
        replan(PLAN, None, at=AT, settings=two)
