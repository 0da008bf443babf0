"""The report of a grid: what it says, that it stands alone, and that a browser draws it."""

from __future__ import annotations

import re
from functools import cache
from typing import Any

import numpy as np
import pytest

from scheduler import MisuseError, WhatIf, what_if
from scheduler.report.what_if_page import page
from scheduler.summary import CAUTION
from tests.report.plans import DAY, MARKET, NASTY, ORDERS, data_of
from tests.report.test_browser import body_of, opened

GRID = {
    "urgency": "0,0.02:5:6",
    "volume": [0.5, 1, 2],
    "impact_law": ["imbalance", "root-lasting"],
}


@cache
def grid_of(**axes: Any) -> WhatIf:
    return what_if(
        ORDERS[:2],
        MARKET[:2],
        grid={name: list(v) for name, v in axes.items()},
        date=DAY,
        at="09:30",
    )


@cache
def worlds() -> WhatIf:
    return what_if(ORDERS[:2], MARKET[:2], grid=GRID, date=DAY, at="09:30")


def chart(html: str, question: str, order: int = 0) -> dict[str, Any]:
    found = [
        c for c in data_of(html)["orders"][order]["charts"] if c["question"].startswith(question)
    ]
    assert len(found) == 1
    result: dict[str, Any] = found[0]
    return result


FRONTIER = "Where does patience stop paying?"
REGRET = "Does the schedule survive another "


def test_the_page_stands_alone_and_cautions() -> None:
    html = page(worlds())
    assert CAUTION in html
    assert "default-src 'none'" in html
    assert not re.search(r'(src|href)="http', html)
    assert "before whole lots" in html


def test_the_frontier_near_the_base_comes_first_with_its_knee() -> None:
    """The first curve is that of the base's world; its knee is the table's."""
    traces = chart(page(worlds()), FRONTIER)["traces"]
    assert traces[0]["name"] == "volume × 1, impact law imbalance"
    frame = worlds().scenarios
    mine = frame[(frame["order_id"] == "o-1") & (frame["volume"] == 1)]
    mine = mine[mine["impact_law"] == "imbalance"].sort_values("urgency")
    np.testing.assert_allclose(traces[0]["y"], mine["expected_cost_bps"], rtol=1e-5)
    knee = mine[mine["knee"]].iloc[0]
    assert traces[1]["x"] == [pytest.approx(knee["cost_std_bps"], rel=1e-5)]
    assert traces[1]["text"] == [f"knee at {knee['urgency']:.3g}"]
    words = data_of(page(worlds()))["orders"][0]["cards"]
    assert "bps of cost shed" in words


def test_the_map_of_regret_is_the_table_at_the_aim_near_the_base() -> None:
    """Rows are laws, columns volumes; every cell as in the table."""
    heat = chart(page(worlds()), REGRET)["traces"][0]
    assert heat["x"] == ["0.5", "1", "2"]
    assert heat["y"] == ["imbalance", "root-lasting"]
    near = worlds().near_base["o-1"]["urgency"]
    frame = worlds().scenarios
    mine = frame[(frame["order_id"] == "o-1") & (frame["urgency"] == near)]
    for _, row in mine.iterrows():
        at = heat["y"].index(row["impact_law"]), [0.5, 1, 2].index(row["volume"])
        assert heat["z"][at[0]][at[1]] == pytest.approx(row["regret_bps"], rel=1e-5, abs=1e-9)


def test_one_world_has_bars_and_choices_alone_have_neither() -> None:
    bars = chart(page(grid_of(volatility=(0.5, 1, 2))), REGRET)["traces"][0]
    assert bars["type"] == "bar"
    assert data_of(page(grid_of(bucket=(15, 30))))["orders"][0]["charts"] == []


def test_infeasible_points_are_gaps() -> None:
    """A dash in the map, no small chart, a row without figures."""
    html = page(grid_of(volume=(0.001 * 10, 1), feedback=(0, 1)))
    heat = chart(html, REGRET)["traces"][0]
    assert [row[0] for row in heat["z"]] == [None, None]
    assert [row[0] for row in heat["text"]] == ["–", "–"]
    order = data_of(html)["orders"][0]
    assert all("volume × 0.01" not in small["question"] for small in order["small"])
    assert "infeasible" in order["rows"]


def test_small_charts_fall_from_all_to_nothing() -> None:
    """The base alone, then points with the base dashed behind them."""
    small = data_of(page(worlds()))["orders"][0]["small"]
    assert 4 <= len(small) <= 8
    assert small[0]["question"] == "the base"
    for drawn in small:
        left = [value for value in drawn["traces"][-1]["y"] if value is not None]
        assert left[0] == 100.0
        assert left[-1] == pytest.approx(0.0, abs=1e-6)
        assert (np.diff(left) <= 1e-9).all()
    assert [len(drawn["traces"]) for drawn in small] == [1] + [2] * (len(small) - 1)


def test_figures_for_notebooks() -> None:
    figure = worlds().figure("frontier", "o-2")
    assert "MILL" in figure.layout.title.text
    assert worlds().figure("regret").data[0].type == "heatmap"
    with pytest.raises(MisuseError, match="there are frontier, regret"):
        worlds().figure("slices")
    with pytest.raises(MisuseError, match="no order is called 'x'"):
        worlds().figure("regret", "x")
    with pytest.raises(MisuseError, match="vary urgency"):
        grid_of(bucket=(15, 30)).figure("frontier")


def test_names_are_escaped() -> None:
    symbol = f"{NASTY}S"
    market = MARKET[:2].assign(symbol=[symbol, "MILL"])
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:2]
    orders = orders.assign(order_id=[f"{NASTY}O", "</script>"], symbol=[symbol, "MILL"])
    result = what_if(orders, market, grid={"volume": [1, 2]}, date=DAY, at="09:30")
    html = page(result)
    assert NASTY not in html
    assert NASTY not in data_of(html)["orders"][0]["cards"]


@pytest.mark.slow
def test_a_browser_draws_it_without_complaint(tmp_path: Any) -> None:
    """Every chart box holds a drawing, also of the order picked, and the console is silent."""
    pick = (
        "<script>setTimeout(() => { const p = document.getElementById('picker'); p.value = '1'; "
        "p.dispatchEvent(new Event('change')); }, 3000)</script></body>"
    )
    document, log = opened(page(worlds()).replace("</body>", pick), tmp_path)
    body = body_of(document)
    boxes = body.split('class="chart ')[1:]
    assert len(boxes) == 2 + len(data_of(page(worlds()))["orders"][1]["small"])
    assert all('class="main-svg"' in box for box in boxes)
    assert re.search(r'<p id="trouble"[^>]* hidden', body)
    assert '<h2 id="title">o-2: sell 42,000 MILL</h2>' in body
    assert "CONSOLE" not in log
