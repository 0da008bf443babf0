"""What a plan says of its own doubts, on its page."""

from __future__ import annotations

import pytest

from scheduler.plan import Plan
from scheduler.report.doubt_cards import doubt_cards
from scheduler.report.markup import number
from scheduler.report.page import page
from tests.desk import name, planned, task
from tests.report.plans import data_of
from tests.report.test_page import Tags

KNOWN = {"settings": {"relaxation": {"value": 0.05, "interval": [0.02, 0.1]}}}


@pytest.fixture(scope="module")
def asked() -> Plan:
    """Two orders, asked both questions."""
    orders = [task(100_000), task(20_000, symbol="MILL")]
    laws = ("imbalance", "root-lasting", "draws")
    return planned(orders, [name(), name("MILL")], uncertainty=KNOWN, worst_of=laws)


def test_figures_stand_on_the_page(asked: Plan) -> None:
    """Regrets of both schedules, ranges, and when the best schedule lies furthest away."""
    html = page(asked)
    row = asked.summary["orders"]["OAKMERE-1"]
    text = Tags(data_of(html)["orders"][0]["cards"]).text
    for key in ("worst_regret_bps", "plain_worst_regret_bps"):
        assert number(row["worst_of"][key], 2) in text
    for key in ("expected_cost_bps", "cost_std_bps", "regret_bps"):
        assert number(row["uncertainty"][key]["high"], 2) in text
    assert "32 draws of the parameters from their intervals" in text
    assert row["uncertainty"]["moves"]["at"][11:16] in text
    assert "In all: what a plain plan makes least" in text
    assert number(row["worst_of"]["plain"]["cost_std_bps"], 2) in text
    assert "no schedule has a lesser worst regret" in text
    assert "the worst regret over imbalance, root-lasting, draws is least" in Tags(html).text
    assert "9 in 10 draws cost" in Tags(html).text


def test_many_worlds_are_cut_to_the_worst(asked: Plan) -> None:
    """Six of the 34, the worst of each schedule among them, and the worst of all."""
    row = asked.summary["orders"]["OAKMERE-1"]
    card = next(iter(doubt_cards(row)))
    assert card.count("<tr>") == 8
    for key in ("worst_world", "plain_worst_world"):
        assert row["worst_of"][key] in Tags(card).text


def test_where_a_world_is_not_convex_nothing_is_claimed() -> None:
    """A large order in a hurry, free to trade it at once."""
    result = planned(
        task(2_000_000),
        name(),
        urgency=10.0,
        max_participation=1.0,
        worst_of="imbalance,rate-power",
    )
    row = result.summary["orders"]["OAKMERE-1"]
    assert row["worst_of"]["proven"] is False
    assert "a lesser one may exist" in next(iter(doubt_cards(row)))


def test_nothing_asked_nothing_said() -> None:
    assert list(doubt_cards(planned(task(), name()).summary["orders"]["OAKMERE-1"])) == []
