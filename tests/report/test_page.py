"""The page holds everything, asks for nothing and lets no text of a table run."""

from __future__ import annotations

from html.parser import HTMLParser

import numpy as np
import pytest

from scheduler.errors import MissingExtraError
from scheduler.plan import plan
from scheduler.report.charts import CHARTS
from scheduler.report.markup import number, shares
from scheduler.report.overview import notes_by_order
from scheduler.report.page import page
from scheduler.settings import Settings
from tests.report.plans import (
    DAY,
    MARKET,
    NASTY,
    ORDERS,
    data_of,
    nasty_names,
    one_order,
    three_orders,
    unpacked,
)


class Tags(HTMLParser):
    """Tags with their attributes, and the text outside scripts and styles."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.feed(html)

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data):
        if self.tags and self.tags[-1][0] not in ("script", "style"):
            self.text += f"{data} "


@pytest.fixture(scope="module")
def html() -> str:
    return page(three_orders())


def test_nothing_is_asked_of_the_network(html):
    """No address anywhere, nothing with a source, and a policy that forbids every request."""
    assert "http://" not in html
    assert "https://" not in html
    tags = Tags(html).tags
    assert not [tag for tag, attributes in tags if {"src", "href", "srcset"} & attributes.keys()]
    policy = next(a["content"] for t, a in tags if t == "meta" and "http-equiv" in a)
    assert policy.startswith("default-src 'none';")
    assert "url(" not in html
    assert "@import" not in html


def test_header_and_caution(html):
    text = Tags(html).text
    assert "Session Thu 5 Mar 2026 · planned as of Thu 5 Mar 09:30 (America/New_York)" in text
    assert "Urgency 0.1: 0.1 bps of expected cost are paid to shed 1 bp" in text
    assert three_orders().summary["caution"] in text


def test_every_order_has_its_row(html):
    """Texts for the reader, exact values for sorting."""
    tags = Tags(html).tags
    rows = [attributes for tag, attributes in tags if tag == "tr" and "data-order" in attributes]
    assert [row["data-order"] for row in rows] == ["0", "1", "2"]
    values = {a["data-value"] for t, a in tags if t == "td" and "data-value" in a}
    for row in three_orders().summary["orders"].values():
        for key in ("quantity", "notional", "expected_cost_bps", "cost_std_bps"):
            assert f"{row[key]:.12g}" in values
    options = [attributes["value"] for tag, attributes in tags if tag == "option"]
    assert options == ["0", "1", "2"]


def test_headings_that_sort_are_buttons(html):
    """They can be reached and pressed from the keyboard, and say how the table is sorted."""
    tags = Tags(html).tags
    sorted_by = [i for i, (tag, a) in enumerate(tags) if tag == "th" and "aria-sort" in a]
    assert len(sorted_by) == 13
    assert all(tags[i + 1][0] == "button" for i in sorted_by)


def test_a_single_order_needs_no_table_and_no_picker():
    tags = Tags(page(one_order())).tags
    assert not [tag for tag, a in tags if tag == "tr" and "data-order" in a]
    hidden = [a.get("class") for _, a in tags if "hidden" in a]
    assert hidden == ["orders", "pick-one"]


def test_values_of_every_order_are_in_the_page(html):
    """Slices exactly, and the charts' lines to six digits."""
    data, schedule = data_of(html), three_orders().schedule
    assert data["charts"].keys() == CHARTS.keys()
    for order_id, order in zip(("o-1", "o-2", "o-3"), data["orders"], strict=True):
        rows = schedule[schedule["order_id"] == order_id]
        assert order["title"].startswith(f"{order_id}: ")
        assert order["values"]["shares"] == rows["shares"].tolist()
        assert order["values"]["remaining"] == rows["remaining"].tolist()
        np.testing.assert_allclose(order["values"]["slice_cost"], rows["expected_cost"], rtol=1e-5)
        assert len(data["axes"][order["axis"]]["bucket"]) == len(rows)


def test_every_chart_can_be_drawn_from_the_page(html):
    """Each name in a chart's description has a value, for every order."""
    data = data_of(html)
    for order in data["orders"]:
        values = data["axes"][order["axis"]] | order["values"]
        for name in CHARTS:
            texts = _texts(data["charts"][name])
            assert {text[1:] for text in texts if text.startswith("@")} <= values.keys()


def _texts(node: object) -> list[str]:
    if isinstance(node, str):
        return [node]
    inner = node.values() if isinstance(node, dict) else node if isinstance(node, list) else ()
    return [text for item in inner for text in _texts(item)]


def test_figures_of_an_order_stand_on_the_page(html):
    """Cost parts, quantiles, rivals, other laws, other volumes, certificate and notes, in words."""
    row = three_orders().summary["orders"]["o-3"]
    order = data_of(html)["orders"][2]
    text = Tags(order["tiles"]).text + Tags(order["cards"]).text
    assert "650,000" in text
    for value in (row["impact"], row["spread"], row["expected_shortfall_95"]):
        assert number(value) in text
    for case in (row["evenly_timed"], row["second_opinion"]["rate-power"]):
        assert number(case["expected_cost_bps"], 2) in text
    assert number(row["other_volume"]["half_by_volume"]["cost_std_bps"], 2) in text
    assert "Proven: the global optimum, to the gap shown." in text
    assert "max_participation binds in" in text


def test_texts_of_tables_are_escaped():
    """Markup in an id, a symbol, a profile or a group shows as text, on every part of the page."""
    html = page(nasty_names())
    data = data_of(html)
    fragments = [order[key] for order in data["orders"] for key in ("tiles", "cards")]
    assert any(NASTY in note for note in nasty_names().notes)
    for piece in (html, *fragments):
        found = Tags(piece)
        assert "img" not in [tag for tag, _ in found.tags]
        assert not [a for _, a in found.tags if any(name.startswith("on") for name in a)]
    assert NASTY in Tags(html).text
    assert html.count("</script>") == 3  # none but the page's own ends a script
    assert NASTY in data["orders"][0]["title"]  # set as text by the page's script
    assert data["orders"][1]["title"].startswith("</script>: ")


def test_notes_go_to_their_order():
    """The name before a note may itself hold a colon; a note without a name is on the list."""
    market = MARKET[:2].assign(group="g")
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:2].assign(
        order_id=["a", "a: b"], quantity=["600000", "42000"]
    )
    found = plan(orders, market, date=DAY, at="09:30")
    general, special = notes_by_order(found)
    assert sum(map(len, special.values())) + len(general) == len(found.notes)
    for name, notes in special.items():
        assert all(f"{name}: {note}" in found.notes for note in notes)
    assert {"max_auction_participation binds in 2 buckets"} <= set(special["a"])


def test_only_the_largest_orders_have_laws(monkeypatch):
    """In a long list distribution and frontier are worked out for some, and the others say so."""
    monkeypatch.setattr("scheduler.report.page._LAWS_DRAWN", 1)
    data = data_of(page(three_orders()))
    assert [order["lawsDrawn"] for order in data["orders"]] == [False, False, True]
    assert ["mixture" in order["values"] for order in data["orders"]] == [False, False, True]
    assert ["frontier_risk" in order["values"] for order in data["orders"]] == [False, False, True]
    assert data["lawsDrawn"] == 1


def test_an_order_without_risk_has_no_distribution():
    """All in one auction at time zero: the cost is certain, and nothing is drawn of its law."""
    orders = ORDERS[["order_id", "symbol", "side"]][:1].assign(
        quantity="1000", start="16:00", end="16:30"
    )
    found = plan(orders, MARKET[:1], date=DAY, at="09:30")
    assert found.summary["orders"]["o-1"]["cost_std"] == 0.0
    values = data_of(page(found))["orders"][0]["values"]
    assert "mixture" not in values
    assert "frontier_risk" not in values
    for name in ("distribution", "frontier"):
        assert "certain" in found.figure(name).layout.annotations[0].text


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"risk_aversion": 2e-7}, "Risk aversion 2e-07 per USD"),
        ({"risk_budget": 90.0}, "least cost with a standard deviation of at most 90 bps"),
        ({"cost_budget": 60.0}, "least risk with an expected cost of at most 60 bps"),
        ({"urgency": 0.25, "finish": "0.5@12:00"}, "At least to be done: 0.5@12:00"),
    ],
)
def test_what_was_asked_for_is_said(values, words):
    settings = Settings().with_values("plan", **values)
    orders = ORDERS[["order_id", "symbol", "side", "quantity"]][:1]
    found = plan(orders, MARKET[:1], settings=settings, date=DAY, at="09:30")
    assert words in Tags(page(found)).text


def test_the_same_plan_makes_the_same_page():
    assert page(three_orders()) == page(three_orders())


def test_plotly_is_in_the_page_whole(html):
    from plotly.offline import get_plotlyjs

    assert unpacked(html, "plotly") == get_plotlyjs()
    assert len(html) < 2.5e6


def test_written_with_the_plan(tmp_path):
    three_orders().write(tmp_path / "out", report=True)
    assert (tmp_path / "out" / "report.html").read_text(encoding="utf-8") == page(three_orders())


def test_without_plotly_nothing_is_written(tmp_path, monkeypatch):
    import sys

    monkeypatch.setitem(sys.modules, "plotly", None)
    monkeypatch.delitem(sys.modules, "plotly.offline", raising=False)
    with pytest.raises(MissingExtraError, match=r"headrace\[report\]"):
        three_orders().write(tmp_path / "out", report=True)
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [
        (-1234.5, 1, "−1,234.5"),
        (-0.001, 2, "0.00"),
        (None, 0, "–"),
        (float("nan"), 0, "–"),
        (12.0, 0, "12"),
    ],
)
def test_numbers(value, digits, text):
    """A true minus sign, no minus nought, a dash for nothing."""
    assert number(value, digits) == text


def test_share_counts_keep_fractions():
    assert [shares(180000.0), shares(0.125), shares(1234567.5)] == [
        "180,000",
        "0.125",
        "1,234,567.5",
    ]
