"""Estimates with their intervals: what is read, and what is refused with what to do."""

from __future__ import annotations

import json
from typing import Any

import pytest

from scheduler.errors import InputError, MisuseError
from scheduler.tables.estimates import PARAMETERS, RANGES, Estimate, read_estimates

GOOD = {"value": 0.05, "interval": [0.03, 0.09]}


def of(**rows: Any) -> dict[str, Any]:
    """What a file of these estimates holds; `__` stands for the colon before a symbol."""
    return {"settings": {name.replace("__", ":"): row for name, row in rows.items()}}


def problem(data: Any) -> str:
    with pytest.raises(InputError) as caught:
        read_estimates(data)
    return str(caught.value)


def test_a_file_and_what_it_holds_read_alike(tmp_path):
    """Names alone and by symbol; other keys are passed over."""
    daily = {"value": 0.02, "interval": [0.01, 0.03]}
    data = of(relaxation=GOOD, daily_vol__QUAY=daily) | {"levels": None}
    path = tmp_path / "estimates.json"
    path.write_text(json.dumps(data))
    found = read_estimates(path)
    assert found.items == read_estimates(data).items
    assert found.items[0] == Estimate("relaxation", None, 0.05, 0.03, 0.09)
    assert found.items[1] == Estimate("daily_vol", "QUAY", 0.02, 0.01, 0.03)
    assert found.notes == ()
    assert found.source == str(path)


def test_what_no_plan_uses_is_passed_over_and_said():
    found = read_estimates(of(relaxation=GOOD, variance_link=GOOD))
    assert len(found.items) == 1
    assert found.notes == ("estimates that no plan uses are passed over: variance_link",)


def test_an_interval_is_widened_to_hold_its_value():
    """As intervals by resampling need not."""
    found = read_estimates(of(relaxation={"value": 0.1, "interval": [0.03, 0.09]}))
    assert found.items[0].high == 0.1
    assert found.notes == ("uncertainty: the interval of relaxation is widened to hold its value",)


def test_every_parameter_has_a_range():
    assert set(RANGES) == set(PARAMETERS)


@pytest.mark.parametrize(
    ("data", "words"),
    [
        ({"settings": 3}, "has no estimates; write"),
        ({"settings": {}}, "has no estimate that a plan could use; give some of level_rate"),
        (of(relaxation=3), "relaxation: is no number with its interval"),
        (of(relaxation={"value": 0.05}), "is no number with its interval"),
        (of(relaxation={"value": True, "interval": [0.0, 2.0]}), "is no number"),
        (of(relaxation={"value": 0.05, "interval": [0.01, None]}), "is no number"),
        (of(relaxation={"value": 0.05, "interval": [float("nan"), 1.0]}), "is no number"),
        (of(relaxation={"value": 0.05, "interval": [0.1]}), "is no number"),
        (of(relaxation={"value": 11.0, "interval": [1.0, 12.0]}), "must be from 0.0001 to 10"),
        (of(relaxation={"value": 0.05, "interval": [0.09, 0.03]}), "ends before it begins"),
        (of(relaxtion=GOOD), "did you mean 'relaxation'?"),
        (of(reading_weight__QUAY=GOOD), "is the same for every symbol"),
        (of(adv={"value": 1e6, "interval": [1e6, 2e6]}), "give adv:SYMBOL for each symbol"),
    ],
)
def test_refused(data, words):
    assert words in problem(data)


def test_all_problems_at_once():
    text = problem(of(relaxation=3, impact_exponent={"value": 9, "interval": [0, 9]}))
    assert "relaxation" in text
    assert "impact_exponent.value" in text


@pytest.mark.parametrize(
    ("content", "words"),
    [(b"{", "is no well-formed JSON"), (b"\xff", "is not UTF-8 text"), (b"[]", "no estimates")],
)
def test_files_refused(tmp_path, content, words):
    path = tmp_path / "e.json"
    path.write_bytes(content)
    assert words in problem(path)
    assert str(path) in problem(path)


def test_neither_a_path_nor_a_mapping():
    with pytest.raises(MisuseError, match="must be a path, or what such a file holds, not 3"):
        read_estimates(3)  # type: ignore[arg-type]


def test_no_file(tmp_path):
    assert "there is no such file" in problem(tmp_path / "none.json")
