"""The numbers on the page are those of `plan` for the same tables and settings."""

from __future__ import annotations

import io
import json
import zipfile
from dataclasses import replace
from typing import Any

import pandas as pd
import pytest

from scheduler import plan, read_settings
from scheduler.cli import main
from scheduler.console.example import AT, DATE, TABLES, example_desk
from scheduler.errors import InputError
from tests.cli.running import EXAMPLES
from tests.console.page import Page, console, example_files, page
from tests.listed import RISK, SYMBOLS, TIES, market, rows


@pytest.fixture(scope="module")
def shown() -> Page:
    return page().example()


def table(name: str) -> pd.DataFrame:
    return pd.read_csv(EXAMPLES / f"{name}.csv", dtype=str, keep_default_na=False)


def of_plan(urgency: float | None = None, law: str | None = None, **frames: pd.DataFrame) -> Any:
    """The example through `plan`, with tables and settings changed by hand."""
    settings = read_settings(EXAMPLES / "settings.toml")
    settings = settings.with_values("plan", urgency=urgency).with_values("model", impact_law=law)
    given = {name: table(name) for name in TABLES} | frames
    orders, names = given.pop("orders"), given.pop("market")
    return plan(orders, names, settings=settings, date=DATE, at=AT, **given)


def changed(name: str, **columns: Any) -> dict[str, pd.DataFrame]:
    return {name: table(name).assign(**columns)}


def scaled(column: str, factor: float) -> dict[str, pd.DataFrame]:
    given = table("market")
    return changed("market", **{column: (given[column].astype(float) * factor).map(repr)})


READING = pd.DataFrame({"symbol": ["OAKMERE"], "imbalance": ["-0.4"]})
CASES: dict[str, tuple[dict[str, Any], dict[str, Any]]] = {
    "as given": ({}, {}),
    "urgency": ({"urgency": 0.7}, {"urgency": 0.7}),
    "cap": ({"max_participation": 0.12}, changed("orders", max_participation="0.12")),
    "window": (
        {"start": "2026-03-05T10:15:00-05:00", "end": "2026-03-05T15:00:00-05:00"},
        changed("orders", start="10:15", end="15:00"),
    ),
    "volume": ({"volume": 1.5}, scaled("adv", 1.5)),
    "volatility": ({"volatility": 0.5}, scaled("daily_vol", 0.5)),
    "reading": ({"reading": -0.4}, {"readings": READING}),
    "law": ({"impact_law": "root-lasting"}, {"law": "root-lasting"}),
}


@pytest.mark.parametrize("case", CASES)
def test_one_order_is_what_plan_makes_of_it(shown: Page, case: str) -> None:
    """Slices to the share, cost, risk and both rivals to the last digit."""
    values, options = CASES[case]
    orders = options.get("orders", table("orders"))  # all of them cannot do what this one can
    options = options | {"orders": orders[orders["order_id"] == "HB-1"]}
    expected = of_plan(**options)
    row = expected.summary["orders"]["HB-1"]
    slices = expected.schedule[expected.schedule["order_id"] == "HB-1"]
    view = shown.plan("HB-1", **values)
    assert view["values"]["shares"] == slices["shares"].tolist()
    cases = {"plan": row, "evenly": row["evenly_timed"], "by_volume": row["volume_proportional"]}
    for name, figures in cases.items():
        for key, column in (("cost", "expected_cost"), ("risk", "cost_std")):
            assert view["cases"][name][key] == pytest.approx(figures[column], rel=1e-9)
            assert view["cases"][name][f"{key}_bps"] == pytest.approx(
                figures[f"{column}_bps"], rel=1e-9
            )
    high = 1e4 * row["quantiles"]["0.95"] / row["notional"]
    assert view["high"] == pytest.approx(high, rel=1e-9)


def test_each_setting_changes_the_plan(shown: Page) -> None:
    """So that the test above is not of settings that do nothing."""
    found = [shown.plan("HB-1", **values)["cases"]["plan"] for values, _ in CASES.values()]
    assert len({(figures["cost"], figures["risk"]) for figures in found}) == len(CASES)


def test_all_orders_each_alone(shown: Page) -> None:
    expected = of_plan(0.5).summary
    view = shown.plan(None, urgency=0.5)
    total = expected["total"]
    assert view["cases"]["plan"]["cost"] == pytest.approx(total["expected_cost"], rel=1e-9)
    for key, bound in (("risk", "independent"), ("risk_most", "fully_dependent")):
        found = view["cases"]["plan"][key]
        assert found == pytest.approx(total[f"cost_std_{bound}"], rel=1e-9)
    by_order = {row["order"]: row["cost"] for row in view["orders"]}
    assert by_order == {
        name: pytest.approx(row["expected_cost"]) for name, row in expected["orders"].items()
    }
    assert view["values"]["left"][0] == pytest.approx(total["notional"], rel=1e-5)
    traded = sum(view["values"]["bought"]) - sum(view["values"]["sold"])
    undone = view["values"]["left"][-1]
    assert traded + undone == pytest.approx(total["notional"], rel=1e-4)


def test_a_list_planned_as_one() -> None:
    """Its figures are the list's; one of its orders is planned alone, and said to be."""
    corridors = TIES.assign(**{"from": "", "to": ""})[["kind", "lower", "upper"]].iloc[:1]
    corridors = corridors.assign(lower="-40%", upper="40%")
    tables = {
        "orders": pd.DataFrame(rows()),
        "market": pd.DataFrame(market()),
        **RISK,
        "corridors": corridors,
    }
    files = {name: (f"{name}.csv", frame.to_csv(index=False)) for name, frame in tables.items()}
    files["settings"] = ("s.toml", '[cost]\nbase_currency = "USD"\n[plan]\nbucket = 30\n')
    browser = page()
    answer = browser.upload(
        {k: (n, t.encode()) for k, (n, t) in files.items()}, date=DATE, at=AT
    ).json()
    assert answer["desk"]["together"]
    settings = read_settings_of(30.0, 0.4)
    given = {name: frame for name, frame in tables.items() if name not in ("orders", "market")}
    expected = plan(
        tables["orders"], tables["market"], settings=settings, date=DATE, at=AT, **given
    )
    view = browser.plan(None, urgency=0.4)
    total = expected.summary["total"]
    for name, case in (("plan", total), ("evenly", total["evenly_timed"])):
        assert view["cases"][name]["cost"] == pytest.approx(case["expected_cost"], rel=1e-6)
        assert view["cases"][name]["risk"] == pytest.approx(case["cost_std"], rel=1e-6)
    assert {row["symbol"] for row in view["orders"]} == set(SYMBOLS)
    body = {"order": None, "values": {}, "urgencies": [0.0, 0.4, 3.0]}
    points = browser.ask("frontier", body)["points"]
    costs, risks = ([p[name] for p in points] for name in ("expected_cost", "cost_std"))
    assert costs == sorted(costs)
    assert risks == sorted(risks, reverse=True)
    near = view["cases"]["plan"]
    assert (costs[1], risks[1]) == (
        pytest.approx(near["cost_bps"], rel=1e-3),
        pytest.approx(near["risk_bps"], rel=1e-3),
    )
    alone = browser.plan("OAK-1", urgency=0.4)
    untied = plan(tables["orders"], tables["market"], settings=settings, date=DATE, at=AT)
    row = untied.summary["orders"]["OAK-1"]
    assert alone["cases"]["plan"]["cost"] == pytest.approx(row["expected_cost"], rel=1e-9)


def read_settings_of(bucket: float, urgency: float) -> Any:
    from scheduler import Settings

    settings = Settings().with_values("cost", base_currency="USD")
    return settings.with_values("plan", bucket=bucket, urgency=urgency)


def test_the_frontier_holds_the_plan_and_does_not_know_the_urgency(shown: Page) -> None:
    """Its curve is the same from any urgency, as far as their points agree."""
    asked = {"order": "HB-2", "values": {"urgency": 0.3}}
    curve = shown.ask("frontier", asked)["values"]
    figures = shown.plan("HB-2", urgency=0.3)["cases"]["plan"]
    at = min(
        range(len(curve["frontier_urgency"])),
        key=lambda i: abs(curve["frontier_urgency"][i] - 0.3),
    )
    assert curve["frontier_cost"][at] == pytest.approx(figures["cost_bps"], rel=1e-3)
    assert curve["frontier_risk"][at] == pytest.approx(figures["risk_bps"], rel=1e-3)
    other = shown.ask("frontier", {"order": "HB-2", "values": {"urgency": 1.0}})["values"]
    ends = (curve["frontier_cost"][0], curve["frontier_cost"][-1])
    assert (other["frontier_cost"][0], other["frontier_cost"][-1]) == pytest.approx(ends, rel=1e-6)


def test_a_list_without_a_risk_table_says_why_it_has_no_frontier(shown: Page) -> None:
    answer = shown.ask("frontier", {"order": None, "values": {}, "urgencies": [0.1]})
    assert answer["points"] == []
    assert "risk table" in answer["missing"]


def test_answers_carry_their_questions_number(shown: Page) -> None:
    assert shown.plan("HB-1", number=41)["number"] == 41
    refused = shown.post("plan", {"number": 42, "order": "none", "values": {}})
    assert (refused.status_code, refused.json()["number"]) == (422, 42)


def test_an_order_that_cannot_complete_is_refused_as_on_the_command_line(shown: Page) -> None:
    body = {"number": 1, "order": "HB-1", "values": {"max_participation": 0.01}}
    failure = shown.post("plan", body).json()
    assert failure["error"] == "InfeasibleError"
    assert "at most 44,848 of 180,000 shares" in failure["message"]


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"urgency": -1}, "must be a number from 0"),
        ({"urgency": "many"}, "must be a number from 0"),
        ({"max_participation": 2}, "must be a number from 0 to 1"),
        ({"reading": 9}, "must be a number from -5 to 5"),
        ({"start": "25:00"}, "no time of day"),
        ({"impact_law": "best"}, "must be one of"),
        ({"bucket": 1}, "cannot be moved"),
        ({"volume": "0.5:2:4"}, "one value of each setting"),
        ({"start": "14:00", "end": "11:00"}, "is before start"),
    ],
)
def test_settings_out_of_range_are_refused(shown: Page, values: Any, words: str) -> None:
    answer = shown.post("plan", {"number": 1, "order": "HB-1", "values": values})
    assert answer.status_code == 422
    assert words in answer.json()["message"]


@pytest.mark.parametrize("body", [[1], {"order": 3}, {"order": None, "values": [1]}])
def test_questions_of_another_form_are_refused(shown: Page, body: Any) -> None:
    assert shown.post("plan", body).status_code == 422


def test_starts_move_the_plan_and_not_the_axis(shown: Page) -> None:
    """The same instant stands at the same place, whatever the window."""
    given, moved = shown.plan("HB-1"), shown.plan("HB-1", start="2026-03-05T11:00:00-05:00")
    for name in ("x_range", "tick_x", "tick_text"):
        assert moved["values"][name] == given["values"][name]
    places = dict(zip(given["values"]["bucket"], given["values"]["centre"], strict=True))
    found = dict(zip(moved["values"]["bucket"], moved["values"]["centre"], strict=True))
    assert set(found) < set(places)
    assert found == {text: pytest.approx(places[text]) for text in found}
    assert moved["moments"] == given["moments"]


def test_what_is_in_force_is_told(shown: Page) -> None:
    """From the tables where nothing was moved."""
    now = shown.plan("HB-4")["now"]
    assert now["urgency"] == 0.2
    assert now["max_participation"] == 0.1
    assert now["reading"] == pytest.approx(-0.1)
    assert now["start"] == "2026-03-05T09:30:00-05:00"
    assert shown.plan("HB-2")["now"]["start"] == "2026-03-05T10:07:00-05:00"


def test_the_saved_files_are_those_of_plan(shown: Page, tmp_path: Any) -> None:
    """Byte for byte but for the time that solving took, which only the summary tells."""
    answer = shown.post("save", {"order": None, "values": {"urgency": 0.7}})
    with zipfile.ZipFile(io.BytesIO(answer.content)) as packed:
        assert set(packed.namelist()) == {"schedule.csv", "summary.json", "report.html"}
        schedule = packed.read("schedule.csv")
        summary = json.loads(packed.read("summary.json"))
    expected = of_plan(0.7)
    expected.write(tmp_path / "plan")
    assert schedule == (tmp_path / "plan" / "schedule.csv").read_bytes()
    found = {name: row["quantiles"] for name, row in summary["orders"].items()}
    assert found == {n: row["quantiles"] for n, row in expected.summary["orders"].items()}
    assert summary["settings"]["plan"]["urgency"] == 0.7


def test_writing_needs_a_directory_given_at_the_start(shown: Page, tmp_path: Any) -> None:
    asked = {"order": "HB-2", "values": {}}
    assert shown.post("write", asked).status_code == 422
    folder = tmp_path / "plans"
    other = Page(console(out=folder)).load().example()
    assert other.ask("write", asked)["written"] == str(folder)
    assert {file.name for file in folder.iterdir()} == {
        "schedule.csv",
        "summary.json",
        "report.html",
    }


def test_the_packages_example_is_the_repositorys() -> None:
    """One source: the copy that is installed is that of the folder `examples`."""
    from importlib.resources import files

    folder = files("scheduler.console") / "example"
    names = sorted(file.name for file in folder.iterdir())
    assert names == sorted([*(f"{name}.csv" for name in TABLES), "settings.toml"])
    for name in names:
        assert (folder / name).read_bytes() == (EXAMPLES / name).read_bytes(), name


def test_marks_tell_tables_settings_and_moments_apart() -> None:
    """The same desk has the same mark in another session; a changed one another."""
    desk = example_desk()
    assert desk.mark == example_desk().mark
    others = [
        replace(desk, at="10:00"),
        replace(desk, settings=desk.settings.with_values("plan", urgency=0.3)),
        replace(desk, inputs=replace(desk.inputs, readings=None)),
    ]
    assert len({desk.mark, *(other.mark for other in others)}) == 4


def test_tables_of_the_command_line_are_every_sessions_first() -> None:
    desk = replace(example_desk(), title="tables of the command line")
    browser = page(desk)
    known = browser.ask("known")
    assert known["desk"]["mark"] == known["given"] == desk.mark
    assert [row["order"] for row in known["desk"]["orders"]] == desk.names


def test_the_command_needs_both_tables(capsys: pytest.CaptureFixture[str]) -> None:
    from click.testing import CliRunner

    result = CliRunner().invoke(main, ["console", str(EXAMPLES / "orders.csv")])
    assert result.exit_code == 2
    assert "--market" in result.output


def test_an_order_whose_cap_leaves_less_than_a_lot_trades_nothing() -> None:
    """`plan` answers it, so the page does: no time is named for a half of nothing."""
    orders = pd.DataFrame(
        {
            "order_id": ["ELD-1"],
            "symbol": ["ELDMERE"],
            "side": ["buy"],
            "quantity": ["100"],
            "lot_size": ["100"],
            "must_complete": ["no"],
        }
    )
    names = table("market").iloc[:1].assign(symbol="ELDMERE", adv="20000", profile="flat")
    files = {"orders": orders, "market": names}
    sent = {name: (f"{name}.csv", t.to_csv(index=False).encode()) for name, t in files.items()}
    browser = page()
    assert browser.upload(sent, date=DATE, at=AT).status_code == 200
    view = browser.plan("ELD-1", max_participation=0.002)
    assert sum(view["values"]["shares"]) == 0.0
    assert view["words"] == ["buy 100 ELDMERE", "nothing trades", "100 shares stay undone"]


def test_a_wrong_reading_is_told_by_the_row_of_its_own_file() -> None:
    """As `plan` tells it, whatever rows the console put in between."""
    readings = table("readings")
    late = {"readings": readings.assign(time="2026-03-05T12:00:00-05:00")}
    with pytest.raises(InputError) as told:
        of_plan(**late)
    files = example_files()
    files["readings"] = ("readings.csv", late["readings"].to_csv(index=False).encode())
    failure = page().upload(files, date=DATE, at=AT).json()
    rows = [problem["row"] for problem in failure["problems"]]
    assert rows == [problem.row for problem in told.value.problems]
    assert rows
