"""`headrace plan --uncertainty` and `--worst-of`: what is said, written and refused."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from tests.cli.running import WHEN, Put, arguments, run
from tests.samples import MARKET, ORDERS, csv_text

ESTIMATES = json.dumps({"settings": {"relaxation": {"value": 0.05, "interval": [0.02, 0.1]}}})


@pytest.fixture
def files(put: Put) -> dict[str, str]:
    """Orders without min_slice, their market, and estimates."""
    orders = {name: column for name, column in ORDERS.items() if name != "min_slice"}
    return {
        "orders": put("orders.csv", csv_text(orders)),
        "market": put("market.csv", csv_text(MARKET)),
        "uncertainty": put("estimates.json", ESTIMATES),
    }


def test_each_order_and_the_total_say_it(files: dict[str, str], tmp_path: Path) -> None:
    """A line a question at the terminal; all figures in the summary; the file among the inputs."""
    result = run(*arguments(files), *WHEN, "--worst-of", "imbalance,draws", "--out", tmp_path / "o")
    assert result.exit_code == 0
    assert result.stdout.count("worst regret ") == 2
    assert result.stdout.count("9 in 10 of 32 draws: cost ") == 3
    assert "worst regrets add up to " in result.stdout
    assert "plain plan " in result.stdout
    summary = json.loads((tmp_path / "o" / "summary.json").read_text())
    assert summary["inputs"]["uncertainty"] == files["uncertainty"]
    assert summary["total"]["worst_of"]["worlds"] == ["imbalance", "draws"]
    for row in summary["orders"].values():
        assert row["worst_of"]["worst_regret_bps"] <= row["worst_of"]["plain_worst_regret_bps"]
        assert len(row["worst_of"]["regret_bps"]) == 33


def test_without_the_options_nothing_is_said(files: dict[str, str]) -> None:
    del files["uncertainty"]
    result = run(*arguments(files), *WHEN)
    assert result.exit_code == 0
    assert "regret" not in result.stdout
    assert "draws" not in result.stdout


def test_the_estimates_are_not_written_over(files: dict[str, str], tmp_path: Path) -> None:
    """As no input is."""
    path = tmp_path / "summary.json"
    path.write_text(ESTIMATES)
    result = run(*arguments(files | {"uncertainty": str(path)}), *WHEN, "--out", tmp_path)
    assert result.exit_code == 2
    assert path.read_text() == ESTIMATES


@pytest.mark.parametrize(
    ("args", "words"),
    [
        (["--worst-of", "draughts"], "worst_of draughts: known are imbalance, rate-power"),
        (["--worst-of", "imbalance", "--risk-budget", "9"], "keeps no risk_budget"),
        (["--uncertainty", "nowhere.json"], "nowhere.json: there is no such file"),
    ],
)
def test_refused(files: dict[str, str], args: list[str], words: str) -> None:
    """Exit 2, and nothing on stdout."""
    del files["uncertainty"]
    result = run(*arguments(files), *WHEN, *args)
    assert result.exit_code == 2
    assert words in result.stderr
    assert result.stdout == ""
