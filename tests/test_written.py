"""A plan written and read back: the same plan, or a clear no."""

from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
import pytest

from scheduler import InputError, MisuseError, Plan, plan, read_plan, replan
from tests.desk import DAY, name, settings_of, table, task
from tests.filled import on_plan
from tests.listed import COVARIANCE, EXPOSURES, market, rows


@pytest.fixture
def home(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A directory with orders and a market, from which commands are given."""
    table([task(60_000), task(9_000, order_id="late", start="11:00")]).to_csv(
        tmp_path / "orders.csv", index=False
    )
    table(name(spread_bps=4)).to_csv(tmp_path / "market.csv", index=False)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def written(home: Path, **options: str) -> Plan:
    settings = settings_of(urgency=0.3, bucket=30.0)
    made = plan("orders.csv", "market.csv", settings=settings, date=DAY, at="09:30", **options)
    made.write(home / "out")
    return made


def test_it_is_the_same_plan(home: Path) -> None:
    made = written(home, finish="0.6@12:00")
    again = read_plan(home / "out")
    pd.testing.assert_frame_equal(again.schedule, made.schedule)
    assert again.finish == made.finish
    assert again.summary["orders"].keys() == made.summary["orders"].keys()


def test_from_a_directory_as_from_the_plan(home: Path) -> None:
    made = written(home)
    done = on_plan(made, "2026-03-05T12:00:00-05:00")
    both = [replan(source, done, at="12:00") for source in (made, home / "out")]
    assert both[0].plan is not None
    assert both[1].plan is not None
    pd.testing.assert_frame_equal(both[0].plan.schedule, both[1].plan.schedule)
    assert both[1].summary["inputs"]["plan"] == str(home / "out")


def test_a_list_with_parquet_and_its_tables_elsewhere(home: Path) -> None:
    """Tables moved into the plan's directory are found by their names."""
    tables = {
        "orders": table(rows()),
        "market": table(market(currency="USD", fx=1.0)),
        "exposures": EXPOSURES,
        "factor_covariance": COVARIANCE,
    }
    for key, frame in tables.items():
        frame.to_csv(home / f"{key}.csv", index=False)
    orders, *others = (f"{key}.csv" for key in tables)
    settings = settings_of(bucket=30.0)
    made = plan(
        orders,
        others[0],
        exposures=others[1],
        factor_covariance=others[2],
        settings=settings,
        date=DAY,
        at="09:30",
    )
    made.write(home / "out", parquet=True)
    for key in tables:
        (home / f"{key}.csv").rename(home / "out" / f"{key}.csv")
    again = read_plan(home / "out")
    assert again.transition is not None
    assert (again.schedule["shares"] == made.schedule["shares"]).all()


def test_a_table_that_is_gone_or_has_changed(home: Path) -> None:
    written(home)
    table(name(spread_bps=4, daily_vol=0.03)).to_csv(home / "market.csv", index=False)
    with pytest.raises(MisuseError, match=r"no longer give the plan in .*order OAKMERE-1, bucket"):
        read_plan(home / "out")
    (home / "market.csv").unlink()
    with pytest.raises(InputError, match=r"market.csv: the plan's market table is not there"):
        read_plan(home / "out")


def test_what_is_no_plan(home: Path) -> None:
    with pytest.raises(InputError, match="there is no plan here"):
        read_plan(home / "nowhere")
    (home / "out").mkdir()
    (home / "out" / "summary.json").write_text("{}")
    with pytest.raises(InputError, match="is no summary of a plan"):
        read_plan(home / "out")
    (home / "out" / "summary.json").write_text("[")
    with pytest.raises(InputError, match="is no summary of a plan"):
        read_plan(home / "out")


def test_a_summary_of_another_schema_or_without_its_schedule(home: Path) -> None:
    written(home)
    place = home / "out" / "summary.json"
    summary = json.loads(place.read_text())
    place.write_text(json.dumps(summary | {"schema": 2}))
    with pytest.raises(InputError, match="is of schema 2, not 1"):
        read_plan(home / "out")
    place.write_text(json.dumps(summary))
    (home / "out" / "schedule.csv").unlink()
    with pytest.raises(InputError, match="there is no schedule here"):
        read_plan(home / "out")


def test_a_re_plan_is_not_planned_again(home: Path) -> None:
    """It owes its imbalance to fills that its own directory does not hold."""
    written(home)
    replan(home / "out", None, at="10:00").write(home / "rest")
    with pytest.raises(MisuseError, match=r"is itself a re-plan; give the first plan, .*out"):
        read_plan(home / "rest")


def test_a_re_plan_does_not_write_over_its_plan(home: Path) -> None:
    written(home)
    result = replan(home / "out", None, at="10:00")
    with pytest.raises(MisuseError, match="was read for this run"):
        result.write(home / "out")


def test_a_plan_of_least_worst_regret(home: Path) -> None:
    """Read back as it was chosen; its rest, which is the best under its own law, says so."""
    table([task(60_000)]).to_csv(home / "orders.csv", index=False)
    made = written(home, worst_of="imbalance,root-lasting")
    again = read_plan(home / "out")
    pd.testing.assert_frame_equal(again.schedule, made.schedule)
    result = replan(again, None, at="10:00")
    assert any("of least worst regret" in note for note in result.notes)


def test_a_transition_is_read_back_from_its_holdings(home: Path) -> None:
    pd.DataFrame({"symbol": ["OAKMERE"], "shares": [50_000]}).to_csv("legacy.csv", index=False)
    pd.DataFrame({"symbol": ["OAKMERE"], "shares": [-9_000]}).to_csv("target.csv", index=False)
    settings = settings_of(urgency=0.3, bucket=30.0)
    held = {"legacy": "legacy.csv", "target": "target.csv"}
    made = plan(None, "market.csv", settings=settings, date=DAY, at="09:30", **held)
    made.write(home / "out")
    assert "orders" not in made.summary["inputs"]
    again = read_plan(home / "out")
    assert (again.schedule["shares"] == made.schedule["shares"]).all()
    assert again.schedule["shares"].sum() == 59_000
