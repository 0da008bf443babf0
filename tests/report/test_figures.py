"""Charts show the plan's own figures."""

from __future__ import annotations

import subprocess
import sys
from itertools import pairwise

import numpy as np
import plotly.graph_objects as go
import pytest

from scheduler.errors import MissingExtraError, MisuseError
from scheduler.report.charts import CHARTS
from tests.report.plans import NASTY, nasty_names, one_order, three_orders

ORDER_IDS = ["o-1", "o-2", "o-3"]


def trace(figure: go.Figure, name: str) -> go.Scatter:
    found = [item for item in figure.data if item.name == name]
    assert len(found) == 1
    return found[0]


def points(values) -> np.ndarray:
    """The points of a line without its breaks."""
    return np.array([value for value in values if value is not None], dtype=float)


def after_buckets(values, order_id: str) -> np.ndarray:
    """The points of a line at bucket ends: not the first, nor the one after a closed period."""
    result = []
    for before, value in pairwise(values):
        if value is not None and before is not None:
            result.append(value)
    assert len(result) == len(rows(order_id))
    return np.array(result, dtype=float)


def rows(order_id: str):
    schedule = three_orders().schedule
    return schedule[schedule["order_id"] == order_id]


@pytest.mark.parametrize("order_id", ORDER_IDS)
@pytest.mark.parametrize("name", CHARTS)
def test_every_chart_is_a_titled_figure(name, order_id):
    """Plotly itself accepts each chart, and its title says which order it shows."""
    figure = three_orders().figure(name, order_id)
    assert isinstance(figure, go.Figure)
    assert figure.layout.title.text.startswith(CHARTS[name].question)
    assert f" {order_id}: " in figure.layout.title.text


def test_the_first_order_is_the_default():
    plan = three_orders()
    assert plan.figure("remaining").to_json() == plan.figure("remaining", "o-1").to_json()


@pytest.mark.parametrize("order_id", ORDER_IDS)
def test_slices_are_the_schedules(order_id):
    """Bars are the shares; outlines are the expected volume, scaled to the same total."""
    figure, table = three_orders().figure("slices", order_id), rows(order_id)
    assert list(trace(figure, "slices").y) == table["shares"].tolist()
    outline = trace(figure, "expected volume")
    np.testing.assert_allclose(outline.customdata, table["expected_volume"])
    assert sum(outline.y) == pytest.approx(table["shares"].sum())
    left, right = figure.layout.yaxis.range, figure.layout.yaxis2.range
    np.testing.assert_allclose(
        np.array(outline.y) / left[1], np.array(outline.customdata) / right[1]
    )
    assert max(outline.y) <= left[1]


@pytest.mark.parametrize("order_id", ORDER_IDS)
def test_auctions_and_binding_caps_differ_by_hatch(order_id):
    """The hatch alone, without colour, says whether a slice is in an auction and at its cap."""
    plan, table = three_orders(), rows(order_id)
    figure = plan.figure("slices", order_id)
    bars = trace(figure, "slices")
    hatch = np.array(bars.marker.pattern.shape)
    auction = (table["kind"] == "auction").to_numpy()
    assert set(hatch[auction]) <= {".", "x"}
    assert set(hatch[~auction]) <= {"", "/"}
    at_cap = np.isin(hatch, ["/", "x"])
    rate = np.where(auction, 0.1, {"o-1": 0.25, "o-2": 0.25, "o-3": 0.2}[order_id])
    lot = 1 if order_id == "o-2" else 100
    cap = table["expected_volume"] * rate / (1.0 - rate)
    np.testing.assert_array_equal(at_cap, table["shares"] > (1.0 - 1e-4) * cap - lot)
    assert at_cap.any()
    shown = {item.name: item.visible for item in figure.data}
    assert shown["at its cap"] == ("/" in hatch)
    assert shown["auction at its cap"] == ("x" in hatch)
    assert shown["auction"] == ("." in hatch)


@pytest.mark.parametrize("order_id", ORDER_IDS)
def test_remaining_is_the_schedules(order_id):
    """The thick line is the plan; the thin dashed ones end where it ends."""
    figure, table = three_orders().figure("remaining", order_id), rows(order_id)
    plan, *rivals = (
        trace(figure, name) for name in ("this plan", "evenly timed", "in proportion to volume")
    )
    np.testing.assert_allclose(after_buckets(plan.y, order_id), table["remaining"], atol=1e-6)
    assert plan.y[0] == table["remaining"].iloc[0] + table["shares"].iloc[0]
    for rival in rivals:
        assert rival.y[0] == plan.y[0]
        assert rival.y[-1] == pytest.approx(0.0, abs=1e-3)
        assert rival.line.width < plan.line.width
        assert rival.line.dash != plan.line.dash
    assert rivals[0].line.dash != rivals[1].line.dash


@pytest.mark.parametrize("order_id", ORDER_IDS)
def test_cost_ends_at_the_summarys(order_id):
    """Cost so far adds up the buckets'; variance so far and ahead make up the total."""
    plan, table = three_orders(), rows(order_id)
    row = plan.summary["orders"][order_id]
    line = trace(plan.figure("cost", order_id), "expected cost")
    bps = 1e4 / row["notional"]
    np.testing.assert_allclose(
        after_buckets(line.y, order_id), bps * table["expected_cost"].cumsum(), atol=1e-9
    )
    assert line.y[-1] == pytest.approx(row["expected_cost_bps"])
    so_far = after_buckets(line.customdata, order_id)
    ahead = bps * table["cost_std_remaining"]
    np.testing.assert_allclose(so_far**2 + ahead**2, row["cost_std_bps"] ** 2)


def test_the_band_is_one_standard_deviation_either_side():
    """The outline holds cost + sd and cost - sd at every time, and is broken over the night."""
    figure = three_orders().figure("cost", "o-3")
    band, line = trace(figure, "± one standard deviation"), trace(figure, "expected cost")
    pieces, drawn = [], []
    for item, target in ((band.x, pieces), (band.y, drawn)):
        target.append([])
        for value in item:
            target.append([]) if value is None else target[-1].append(value)
    assert len(drawn) == 2
    upper = np.concatenate([piece[: len(piece) // 2] for piece in drawn])
    lower = np.concatenate([piece[len(piece) // 2 :][::-1] for piece in drawn])
    cost, std = points(line.y), points(line.customdata)
    np.testing.assert_allclose(upper, cost + std)
    np.testing.assert_allclose(lower, cost - std)
    there = np.concatenate([piece[: len(piece) // 2] for piece in pieces])
    np.testing.assert_allclose(there, points(line.x))


@pytest.mark.parametrize("order_id", ORDER_IDS)
def test_imbalance_and_displacement_are_the_schedules(order_id):
    figure, table = three_orders().figure("imbalance", order_id), rows(order_id)
    for name, column in (("imbalance", "imbalance"), ("price displacement", "displacement_bps")):
        line = trace(figure, name)
        np.testing.assert_allclose(after_buckets(line.y, order_id), table[column], rtol=1e-12)
    reading = {"o-1": 0.15, "o-2": 0.0, "o-3": 0.0}[order_id]
    assert trace(figure, "imbalance").y[0] == pytest.approx(reading)


def test_finish_times_are_marked():
    """What may be left at a finish time is marked, and the plan keeps below it."""
    figure = one_order(finish="0.8@12:00").figure("remaining")
    mark = trace(figure, "no more than this may be left")
    assert mark.visible
    assert list(mark.y) == pytest.approx([0.2 * 180_000])
    line = trace(figure, "this plan")
    assert line.y[line.x.index(mark.x[0])] <= mark.y[0] + 1e-6
    assert not trace(one_order().figure("remaining"), "no more than this may be left").visible


@pytest.mark.parametrize("name", ["frontiers", "", "Slices"])
def test_unknown_charts_are_refused(name):
    with pytest.raises(
        MisuseError, match=r"there are slices, remaining, cost, imbalance, .*frontier"
    ):
        three_orders().figure(name)


def test_unknown_orders_are_refused():
    with pytest.raises(MisuseError, match=r"'o-9'; there are o-1, o-2, o-3$"):
        three_orders().figure("cost", "o-9")


def test_without_plotly_the_extra_is_named(monkeypatch):
    monkeypatch.setitem(sys.modules, "plotly", None)
    monkeypatch.delitem(sys.modules, "plotly.graph_objects")
    with pytest.raises(MissingExtraError, match=r"pip install 'headrace\[report\]'"):
        three_orders().figure("cost")


def test_titles_are_escaped():
    """Plotly reads some markup in its texts; names are not to be read so."""
    title = nasty_names().figure("slices").layout.title.text
    assert "<" not in title
    assert NASTY.replace("<", "&lt;")[:20] in title


def test_plotly_is_loaded_only_to_draw():
    """Neither the package nor the report's own modules load it."""
    code = (
        "import sys, scheduler, scheduler.plan, scheduler.report.page\n"
        "print('plotly' in sys.modules)"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.strip() == "False"
