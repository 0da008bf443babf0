"""The page of a list planned as one shows the list's own figures."""

from __future__ import annotations

import re

import numpy as np
import plotly.graph_objects as go
import pytest

from scheduler.balances import risk_shares
from scheduler.errors import MisuseError
from scheduler.model.ragged import Array
from scheduler.plan import Plan
from scheduler.report import palette
from scheduler.report.clock_axis import ClockAxis
from scheduler.report.list_axis import list_axis
from scheduler.report.list_parts import half
from scheduler.report.markup import number, percent
from scheduler.report.page import page
from scheduler.sessions import Kind
from tests.report.lists import nasty_list, six_orders, without_factors
from tests.report.plans import NASTY, data_of
from tests.report.test_browser import body_of, opened
from tests.report.test_figures import points, trace
from tests.report.test_page import Tags

CHARTS = [
    "sides",
    "left",
    "currencies",
    "corridor:cash",
    "corridor:group:home",
    "corridor:factor:market",
    "exposures",
    "risk",
    "list_distribution",
]


@pytest.fixture(scope="module")
def html() -> str:
    return page(six_orders())


def column(plan: Plan, name: str) -> Array:
    assert plan.balances is not None
    return plan.balances[name].to_numpy(dtype=float)


def at_ends(values) -> Array:
    """The points of a line at the ends of the clock's intervals: all but the one at time zero."""
    return points(values)[1:]


@pytest.mark.parametrize("name", CHARTS)
def test_every_chart_of_a_list_is_a_figure(name):
    figure = six_orders().figure(name)
    assert isinstance(figure, go.Figure)
    assert figure.layout.title.text.endswith("?")
    assert figure.data


def test_unknown_charts_of_a_list_are_refused():
    with pytest.raises(MisuseError, match=r"slices, .*, sides, left, .*corridor:cash, .*risk"):
        six_orders().figure("corridor:gross")


@pytest.mark.parametrize(("plan"), [six_orders, without_factors])
def test_sides_are_the_balances(plan):
    """Per cent of each side's own value, and the money behind it."""
    found, value = plan(), plan().transition.value
    figure = found.figure("sides")
    for name, words, total in (
        ("bought", "buys", value[value > 0.0].sum()),
        ("sold", "sells", -value[value < 0.0].sum()),
    ):
        line = trace(figure, words)
        np.testing.assert_allclose(at_ends(line.customdata), column(found, name))
        np.testing.assert_allclose(at_ends(line.y), 100.0 * column(found, name) / total)
        assert line.y[0] == 0.0
        assert line.y[-1] == pytest.approx(100.0)


@pytest.mark.parametrize(("plan"), [six_orders, without_factors])
def test_what_is_left_is_the_balances(plan):
    found = plan()
    figure = found.figure("left")
    for name, start in (("gross", found.summary["total"]["notional"]), ("net", None)):
        line = trace(figure, name)
        np.testing.assert_allclose(at_ends(line.y), column(found, name))
        assert start is None or line.y[0] == pytest.approx(start)


def test_currencies_are_the_balances():
    """The largest currency comes first; each ends at 100 %, and cash adds up to the list's."""
    plan = six_orders()
    figure = plan.figure("currencies")
    assert [line.name for line in figure.data] == ["USD", "GBP"] * 2
    cash = [at_ends(line.y) for line in figure.data[2:]]
    np.testing.assert_allclose(cash[0], column(plan, "cash:USD"), atol=1e-6)
    np.testing.assert_allclose(cash[1], column(plan, "cash:GBP"), atol=1e-6)
    np.testing.assert_allclose(sum(cash), column(plan, "cash"))
    assert [line.y[-1] for line in figure.data[:2]] == pytest.approx([100.0, 100.0])


@pytest.mark.parametrize("measure", ["cash", "factor:market", "group:home"])
def test_corridors_are_the_balances(measure):
    """The level and the limits at each interval's end."""
    plan = six_orders()
    figure = plan.figure(f"corridor:{measure}")
    level = trace(figure, "level")
    np.testing.assert_allclose(at_ends(level.y), column(plan, measure), atol=1e-6)
    ends, limit = list_axis(plan.transition).right, trace(figure, "limit")
    drawn = set(zip(limit.x, limit.y, strict=True))
    for bound in (column(plan, f"{measure}_upper"), column(plan, f"{measure}_lower")):
        given = np.isfinite(bound)
        assert set(zip(ends[given].tolist(), bound[given].tolist(), strict=True)) <= drawn
    assert set(points(limit.x)) <= set(ends)


def test_between_two_ends_stands_the_looser_limit():
    """A limit that tightens at 11:00 falls there, and one that ends at 14:00 rises there."""
    plan = six_orders()
    axis = list_axis(plan.transition)
    limit = trace(plan.figure("corridor:cash"), "limit")
    wide, narrow = (share * plan.summary["total"]["notional"] for share in (0.6, 0.35))
    clock = {axis.ends(at).strftime("%H:%M"): float(axis.right[at]) for at in range(len(axis.left))}
    upper = list(zip(limit.x, limit.y, strict=True))
    for time, steps in (("11:00", (wide, narrow)), ("14:00", (narrow, wide))):
        there = [y for x, y in upper if x == clock[time] and y > 0.0]
        assert there == sorted(there, reverse=steps[0] > steps[1])
        assert (there[0], there[-1]) == pytest.approx(steps)


def test_the_ground_beyond_limits_is_hatched_to_the_edge():
    figure = six_orders().figure("corridor:cash")
    bottom, top = figure.layout.yaxis.range
    above, below = figure.data[:2]
    assert max(points(above.y)) == top
    assert min(points(below.y)) == bottom
    assert above.fillpattern.shape == below.fillpattern.shape == "/"
    level = points(trace(figure, "level").y)
    assert bottom < level.min()
    assert level.max() < top


def test_the_tighter_of_two_corridors_counts():
    """Two on cash: between 11:00 and 14:00 the narrower upper limit, and the wider lower one."""
    plan = six_orders()
    gross = plan.summary["total"]["notional"]
    assert set(np.round(np.unique(column(plan, "cash_upper")[:-1] / gross), 9)) == {0.35, 0.6}
    inside = plan.balances["time"].str[11:16].between("11:00", "14:00").to_numpy()
    assert (column(plan, "cash_upper")[inside] < 0.36 * gross).all()
    np.testing.assert_allclose(column(plan, "cash_lower")[:-1], -0.3 * gross)


def test_touching_a_limit_is_marked():
    """Marks stand where the level is within whole lots of a limit, and nowhere else."""
    plan = six_orders()
    mark = trace(plan.figure("corridor:cash"), "at a limit")
    lots = np.linalg.norm(plan.book.lot * plan.book.arrays.market.price)
    room = column(plan, "cash_upper") - column(plan, "cash")
    room = np.minimum(room, column(plan, "cash") - column(plan, "cash_lower"))
    assert len(mark.y) == (room < 1.01 * lots).sum() > 0
    assert not trace(plan.figure("corridor:group:home"), "at a limit").visible


def test_risk_is_the_summarys():
    """Plain bars add up to 100 %, hatched ones to the factors' part."""
    split = six_orders().summary["total"]["risk_split"]
    bars = six_orders().figure("risk").data[0]
    plain = np.array(bars.marker.pattern.shape) == palette.FREE
    parts = np.array(bars.x)
    assert parts[plain].sum() == pytest.approx(100.0)
    assert parts[~plain].sum() == pytest.approx(100.0 * split["factors"])
    named = dict(zip(np.array(bars.customdata)[~plain], parts[~plain], strict=True))
    assert named == pytest.approx({k: 100.0 * v for k, v in split["by_factor"].items()})
    assert list(named) == sorted(named, key=lambda name: -named[name])


def test_exposures_are_the_balances():
    plan = six_orders()
    for name in ("market", "size"):
        line = trace(plan.figure("exposures"), name)
        np.testing.assert_allclose(at_ends(line.y), column(plan, f"factor:{name}"), atol=1e-6)


def test_the_lists_distribution_is_the_summarys():
    """Marked quantiles and the expected shortfall, in bps of the list's value."""
    total = six_orders().summary["total"]
    figure = six_orders().figure("list_distribution")
    bps = 1e4 / total["notional"]
    marks = points(figure.data[3].x)[::2]
    expected = [bps * total["quantiles"][p] for p in ("0.05", "0.5", "0.95", "0.99")]
    np.testing.assert_allclose(marks, expected)
    shortfall = trace(figure, "expected shortfall").x[0]
    assert shortfall == pytest.approx(bps * total["expected_shortfall_95"])


@pytest.mark.parametrize(("plan"), [six_orders, without_factors])
def test_parts_of_the_risk_add_up(plan):
    found = plan()
    parts = risk_shares(found.transition, found.figures)
    assert parts.sum() == pytest.approx(1.0, abs=1e-12)
    total = found.summary["total"]["cost_std"] ** 2
    own = found.book.layout.sum(found.figures.stage_variance[1])
    assert (parts * total - own).sum() == pytest.approx(
        total * (1.0 - found.summary["total"]["risk_split"]["own_imbalance"])
    )


def test_parts_of_the_risk_are_the_covariances():
    """x_i (Sigma x)_i by Simpson's rule on each interval, exact for what is linear there."""
    plan = six_orders()
    transition, risk = plan.transition, plan.transition.risk
    ends = transition.left(plan.figures.shares)
    starts = np.column_stack((np.ones(len(ends)), ends[:, :-1]))
    sigma = risk.exposures @ risk.covariance @ risk.exposures.T + np.diag(risk.specific)
    expected = plan.book.layout.sum(plan.figures.stage_variance[1])
    for share, x in ((1 / 6, starts), (4 / 6, 0.5 * (starts + ends)), (1 / 6, ends)):
        at = transition.coupling.weight * x * transition.value[:, None]
        expected = expected + share * (at * (sigma @ at)).sum(axis=1)
    found = risk_shares(transition, plan.figures)
    np.testing.assert_allclose(found, expected / expected.sum(), rtol=1e-9)
    assert expected.sum() == pytest.approx(plan.summary["total"]["cost_std"] ** 2)


def test_how_many_make_up_half():
    assert half(np.array([0.2, 0.5, 0.3])) == 1
    assert half(np.array([0.2, 0.4, 0.4])) == 2
    assert half(np.array([1.2, -0.2])) == 1
    assert half(np.zeros(3)) == 0


def test_the_dearest_orders_come_first(html):
    """The table is sorted by what each order costs the list, and says so."""
    tags = Tags(html).tags
    rows = [int(a["data-order"] or 0) for t, a in tags if t == "tr" and "data-order" in a]
    cost = six_orders().figures.expected_cost
    assert rows == np.argsort(-cost, kind="stable").tolist()
    sorted_by = [a["aria-sort"] for t, a in tags if t == "th" and "aria-sort" in a]
    assert sorted_by.count("descending") == 1
    assert data_of(html)["first"] == rows[0]


def test_every_order_has_its_parts(html):
    plan, text = six_orders(), Tags(html).text
    parts = risk_shares(plan.transition, plan.figures)
    costs = plan.figures.expected_cost / plan.figures.expected_cost.sum()
    tiles = [order["tiles"] for order in data_of(html)["orders"]]
    for cost, risk, tile in zip(costs, parts, tiles, strict=True):
        for words in (percent(cost), percent(risk)):
            assert words in text
            assert words in tile


def test_orders_at_their_caps_can_be_chosen(html):
    """A row's kinds say whether a cap binds anywhere, and whether outside auctions: the notes."""
    plan, tags = six_orders(), Tags(html).tags
    found = {
        plan.book.names[int(a["data-order"] or 0)]: (a["class"] or "").split()
        for t, a in tags
        if t == "tr" and "data-order" in a
    }
    for name, kinds in found.items():
        mine = [note for note in plan.notes if note.startswith(f"{name}: ") and "binds" in note]
        assert ("capped" in kinds) == bool(mine)
        outside = any("max_participation" in note for note in mine)
        assert ("capped-continuous" in kinds) == outside
    assert "capped-continuous" in found["c"]
    assert "capped-continuous" not in found["a"]
    choices = [a["value"] for t, a in tags if t == "input" and a.get("name") == "caps"]
    assert choices == ["", ".capped", ".capped-continuous"]


def test_the_lists_figures_stand_on_the_page(html):
    total, text = six_orders().summary["total"], Tags(html).text
    for value in (total["impact"], total["notional"], total["expected_shortfall_95"]):
        assert number(value) in text
    for case in ("evenly_timed", "volume_proportional"):
        rival = total[case]
        assert number(rival["cost_std_bps"], 2) in text
        assert number(max(rival["corridor_excess"].values())) in text
    assert "All orders are planned as one list." in text
    assert "beyond a corridor, USD" in text


def test_simpler_lists_cost_what_their_orders_cost():
    """Costs add up over orders; risk does not."""
    summary = six_orders().summary
    for case in ("evenly_timed", "volume_proportional"):
        costs = [row[case]["expected_cost"] for row in summary["orders"].values()]
        assert summary["total"][case]["expected_cost"] == pytest.approx(sum(costs))
        assert summary["total"]["objective"] < summary["total"][case]["objective"]


def test_frontiers_are_left_out_and_why(html):
    """A frontier solves an order alone; a point of a list's order need not lie on it."""
    assert "Left out: a frontier solves an order alone." in Tags(html).text
    assert 'data-chart="frontier"' not in html
    assert not any("frontier_risk" in order["values"] for order in data_of(html)["orders"])
    note = six_orders().figure("frontier", "b").layout.annotations[0].text
    assert note.startswith("Left out")


def test_charts_of_the_page_are_the_figures(html):
    """What the page draws from is what `figure` draws, to six digits."""
    listed = data_of(html)["list"]
    assert len(listed["charts"]) == len(CHARTS) == html.count("data-list=")
    level = listed["charts"][CHARTS.index("corridor:cash")]["values"]["level"]
    drawn = trace(six_orders().figure("corridor:cash"), "level").y
    np.testing.assert_allclose(points(level), points(drawn), rtol=1e-5)
    for chart in listed["charts"]:
        names = _names(chart["traces"]) | _names(chart["layout"])
        assert names <= (listed["axis"] | chart["values"]).keys()


def _names(node: object) -> set[str]:
    if isinstance(node, str):
        return {node[1:]} if node.startswith("@") else set()
    inner = node.values() if isinstance(node, dict) else node if isinstance(node, list) else ()
    return {name for item in inner for name in _names(item)}


def test_of_many_corridors_the_nearest_are_drawn(monkeypatch):
    """The others stand in the table only."""
    monkeypatch.setattr("scheduler.report.list_section._CORRIDORS_DRAWN", 1)
    few = page(six_orders())
    assert few.count("data-list=") == len(CHARTS) - 2
    assert "Does cash stay in its corridor?" in few
    assert "Does the net of home stay" not in few
    assert "group:home" in Tags(few).text


def test_a_plain_list_has_only_the_charts_it_can_fill():
    """One currency, no groups, no factors: neither currencies nor exposures."""
    html = page(without_factors())
    assert "How far is each currency?" not in html
    assert "Which exposures are left?" not in html
    assert "Does cash stay in its corridor?" in html
    assert "94\u00a0% names" in Tags(html).text
    assert "taken as independent" in Tags(html).text
    assert "No risk table was given" in Tags(html).text


def test_the_clock_of_a_list_shuts_when_all_exchanges_are():
    """New York and London have no common pause in a day; over a night there is one."""
    day, night = (list_axis(plan().transition) for plan in (six_orders, without_factors))
    assert Kind.CLOSED not in day.grid.kind
    assert (night.grid.kind == Kind.CLOSED).sum() == 1
    assert [axis.grid.auction.sum() for axis in (day, night)] == [4, 3]
    for axis in (day, night):
        _no_gaps(axis)


def _no_gaps(axis: ClockAxis) -> None:
    np.testing.assert_allclose(axis.left[1:], axis.right[:-1])
    assert (axis.right > axis.left).all()


def test_no_two_lines_have_one_dash():
    """Lines alike are told apart without any colour."""
    dashes = [dash for _, dash in palette.SERIES]
    assert len(set(dashes)) == len(dashes)


def test_nothing_is_asked_of_the_network(html):
    assert "http://" not in html
    assert "https://" not in html
    assert not [tag for tag, a in Tags(html).tags if {"src", "href", "srcset"} & a.keys()]


def test_texts_of_tables_are_escaped():
    """Markup in a factor, a group, a symbol or an id shows as text everywhere."""
    html = page(nasty_list())
    tags = Tags(html)
    assert "img" not in [tag for tag, _ in tags.tags]
    assert not [a for _, a in tags.tags if any(name.startswith("on") for name in a)]
    assert html.count("</script>") == 3  # none but the page's own ends a script
    assert f"factor:{NASTY}f" in tags.text
    assert "group <b>h</b>" in tags.text
    assert "<" not in nasty_list().figure(f"corridor:group:{NASTY}g").layout.title.text
    for chart in data_of(html)["list"]["charts"]:
        texts = [v for k, v in chart["values"].items() if k.startswith("name")]
        assert not [text for text in texts if "<" in text]


def test_the_same_list_makes_the_same_page(html):
    assert page(six_orders()) == html


def test_written_with_the_balances(tmp_path):
    six_orders().write(tmp_path / "out", report=True)
    names = sorted(path.name for path in (tmp_path / "out").iterdir())
    assert names == ["balances.csv", "report.html", "schedule.csv", "summary.json"]


@pytest.mark.slow
def test_in_a_browser_all_charts_are_drawn_and_orders_chosen(tmp_path):
    """Every box of the list holds a drawing; the choice leaves the orders that it names."""
    presses = (
        "<script>setTimeout(() => {"
        "document.querySelectorAll('[name=caps]')[2].click();"
        "document.querySelector('.pick').click();"
        "}, 3000)</script></body>"
    )
    document, log = opened(page(six_orders()).replace("</body>", presses), tmp_path)
    body = body_of(document)
    boxes = body.split('data-list="')[1:]
    assert len(boxes) == len(CHARTS)
    assert all('class="main-svg"' in box for box in boxes)
    assert re.findall(r'<tr data-order="(\d)"', body) == ["2"]
    assert "1 of 6 orders" in body
    assert '<h2 id="title">c: buy 650,000 LOCK</h2>' in body
    assert "CONSOLE" not in log


@pytest.mark.slow
def test_in_a_browser_markup_in_names_does_not_run(tmp_path):
    document, log = opened(page(nasty_list()), tmp_path)
    assert "<title>Plan 2026-03-05</title>" in document
    assert "<img" not in body_of(document)
    assert "CONSOLE" not in log
