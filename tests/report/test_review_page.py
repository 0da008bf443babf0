"""The page of a review: whole for lists, unfinished and untouched orders; what its charts draw."""

from __future__ import annotations

import pandas as pd
import pytest

from scheduler.report.review_charts import outcome_chart, parts_chart, together_chart
from scheduler.report.review_page import page
from scheduler.review import review
from scheduler.shortfall.parts import PARTS
from tests.desk import name, planned, task
from tests.filled import on_plan
from tests.listed import RISK, TIES, listed


def test_a_list_shows_its_place_in_its_own_law() -> None:
    plan = listed(corridors=TIES, **RISK)
    html = page(review(plan, on_plan(plan, "2026-03-07T00:00Z")))
    assert "The list’s place" in html or "The list&#x27;s place" in html
    assert html.count("<option") == 1 + len(plan.book.names)


def test_orders_unfinished_or_never_begun_have_a_page() -> None:
    orders = [task(5_000, order_id="A<b>"), task(2_000, symbol="BECKFOOT", order_id="B")]
    plan = planned(orders, [name(), name("BECKFOOT")], bucket=30.0)
    fills = on_plan(plan, "2026-03-05T12:00:00-05:00")
    closes = pd.DataFrame({"symbol": ["OAKMERE", "BECKFOOT"], "close": [50.5, 51.0]})
    html = page(review(plan, fills[fills["order_id"] != "B"], closes=closes))
    assert "nothing traded" in html
    assert "<b>" not in html  # names are escaped


def test_the_parts_lead_to_the_shortfall() -> None:
    plan = planned(task(5_000), name(spread_bps=4.0), bucket=30.0)
    row = review(plan, on_plan(plan, "2026-03-07T00:00Z")).summary["orders"]["OAKMERE-1"]
    (bars,) = parts_chart(row).traces
    assert len(bars["x"]) == len(PARTS)  # timing is not known; the shortfall is
    assert "timing and residual" in bars["x"]
    assert sum(bars["y"][:-1]) == pytest.approx(bars["y"][-1])


def test_an_outcome_beyond_the_law_is_still_on_the_chart() -> None:
    plan = planned(task(5_000), name(), bucket=30.0)
    law, value = plan.figures.distribution(0), 250_000.0
    for cost in (-9.0, 0.0, 9.0):
        chart = outcome_chart(law, cost * float(law.std[0]), value, "the plan")
        assert chart is not None
        low, high = chart.layout["xaxis"]["range"]
        assert low < chart.traces[1]["x"][0] < high


def test_outcomes_together_are_drawn_in_order_and_flags_are_marked() -> None:
    frame = pd.DataFrame({"quantile": [0.9, 0.1, None, 0.999, 0.5, 0.4, 0.2]})
    names = [f"o-{number}" for number in range(7)]
    flagged = [False, False, False, True, False, False, False]
    chart = together_chart(names, frame["quantile"].to_numpy(dtype=float), flagged)
    assert chart is not None
    dots = chart.traces[1]
    assert dots["text"] == ["o-1", "o-6", "o-5", "o-4", "o-0", "o-3"]
    assert dots["marker"]["symbol"].count("diamond") == 1
    assert together_chart(names[:2], frame["quantile"].to_numpy()[:2], flagged[:2]) is None
