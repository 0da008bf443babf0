"""Risk and cost budgets of a list planned as one."""

from __future__ import annotations

import pytest

from scheduler import InfeasibleError
from tests.listed import RISK, TIES, corridor, listed


@pytest.mark.parametrize("budget", [19.0, 30.0, 41.0])
def test_a_risk_budget_is_met_at_the_least_cost(budget: float) -> None:
    """To the rounding of lots; the same list at the urgency found is the same plan."""
    result = listed(**RISK, corridors=TIES, aim={"risk_budget": budget})
    total = result.summary["total"]
    assert total["cost_std_bps"] == pytest.approx(budget, abs=5e-3)
    urgency = result.book.arrays.urgency[0]
    again = listed(**RISK, corridors=TIES, aim={"urgency": urgency})
    assert again.schedule.equals(result.schedule)
    looser = listed(**RISK, corridors=TIES, aim={"risk_budget": budget + 0.1})
    assert looser.summary["total"]["expected_cost"] < total["expected_cost"]


@pytest.mark.parametrize("budget", [10.6, 15.0, 19.0])
def test_a_cost_budget_is_met_at_the_least_risk(budget: float) -> None:
    result = listed(**RISK, corridors=TIES, aim={"cost_budget": budget})
    total = result.summary["total"]
    assert total["expected_cost_bps"] == pytest.approx(budget, abs=5e-3)
    tighter = listed(**RISK, corridors=TIES, aim={"cost_budget": budget - 0.1})
    assert tighter.summary["total"]["cost_std"] > total["cost_std"]


def test_budgets_that_are_no_limit() -> None:
    """A patient list keeps any large risk budget; a large cost budget buys the most urgent."""
    patient = listed(**RISK, aim={"risk_budget": 1e3})
    assert patient.book.arrays.urgency[0] == 0.0
    urgent = listed(**RISK, aim={"cost_budget": 1e3})
    assert urgent.book.arrays.urgency[0] == 1e4


@pytest.mark.parametrize(
    ("aim", "word"), [("risk_budget", "standard deviation"), ("cost_budget", "expected cost")]
)
def test_a_budget_out_of_reach_says_what_is_attainable(aim: str, word: str) -> None:
    """And what it names is attained."""
    with pytest.raises(InfeasibleError, match=f"the list: {aim} 2 bps is out of reach") as caught:
        listed(**RISK, corridors=TIES, aim={aim: 2.0})
    least = float(str(caught.value).split(" attainable is ")[1].split(" bps")[0])
    assert word in str(caught.value)
    listed(**RISK, corridors=TIES, aim={aim: least + 0.01})


def test_a_budget_with_corridors_that_must_give_way() -> None:
    """Refused without --soften; with it both are met as far as can be."""
    narrow = corridor("cash", "-0.1%", "0.1%", **{"from": "09:30", "to": "09:45"})
    half = corridor("gross", "", "1%", to="10:00")
    with pytest.raises(InfeasibleError, match="corridor gross: no schedule keeps"):
        listed(**RISK, corridors=half, aim={"risk_budget": 30.0})
    soft = listed(**RISK, corridors=half, soften=True, aim={"cost_budget": 25.0})
    assert any(note.startswith("softened: corridor gross") for note in soft.notes)
    assert listed(**RISK, corridors=narrow, aim={"risk_budget": 30.0}).transition is not None
