"""The page of a re-plan: what it says of orders, its charts, and that nothing in it runs."""

from __future__ import annotations

import pandas as pd
import pytest

from scheduler import Replan, replan
from scheduler.report.replan_page import page
from tests.filled import on_plan
from tests.report.plans import NASTY, data_of, nasty_names, three_orders

AT = "2026-03-05T12:00:00-05:00"


@pytest.fixture(scope="module")
def result() -> Replan:
    """Two thirds of what was planned, and a reading."""
    done = on_plan(three_orders(), AT)
    readings = pd.DataFrame({"symbol": ["QUAY"], "imbalance": ["0.3"]})
    return replan(three_orders(), done[done.index % 3 > 0], at=AT, readings=readings)


def test_lines_end_where_the_order_does_and_bars_add_up(result: Replan) -> None:
    for order, name in zip(data_of(page(result))["orders"], ("o-1", "o-2", "o-3"), strict=True):
        row = result.summary["orders"][name]
        progress, cost = order["charts"]
        ends = {trace["name"]: trace["y"][-1] for trace in progress["traces"]}
        assert ends["planned"] == row["quantity"]
        assert ends["done"] == row["done"]
        assert ends["the rest"] == row["quantity"]
        assert ends["what chance explains"] == pytest.approx(row["planned"])
        axis = [trace["x"] for trace in progress["traces"]]
        assert all(list(x) == sorted(x) for x in axis)
        bars = cost["traces"][0]["y"]
        assert sum(bars[:-1]) == pytest.approx(bars[-1], abs=1e-4 * max(map(abs, bars)))


def test_all_that_stands_on_it_is_text() -> None:
    """Names that are markup are shown, never run."""
    rest = replan(nasty_names(), None, at="10:00")
    html = page(rest)
    for piece in (
        html,
        *(order[key] for order in data_of(html)["orders"] for key in ("tiles", "cards")),
    ):
        assert "<img" not in piece
    assert NASTY in data_of(html)["orders"][0]["title"]
    assert html.count("</script>") == 3


def test_nothing_left_is_said() -> None:
    everything = on_plan(three_orders(), "2026-03-07T00:00:00-05:00")
    result = replan(three_orders(), everything, at="2026-03-06T16:30")
    assert result.plan is None
    assert "nothing is left that can be traded" in page(result)
