"""A plan made again from the journal is the plan that was kept; what differs is said."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from scheduler import MisuseError, Plan, plan
from scheduler.journal.compare import compare
from scheduler.journal.entries import record, record_plan
from scheduler.journal.reading import exported, inputs_of, manifest_of
from scheduler.journal.reproduce import reproduce
from scheduler.journal.store import Journal
from scheduler.journal.verify import verify
from scheduler.settings import Settings
from tests import desk, listed

EXAMPLES = Path(__file__).parents[2] / "examples"
WHEN: dict[str, Any] = {"date": "2026-03-05", "at": "09:30"}
FILES = {name: EXAMPLES / f"{name}.csv" for name in ("orders", "market", "profiles", "readings")}


def _of_files(**options: Any) -> Plan:
    return plan(**{**FILES, **WHEN, "settings": _settings(), **options})


def _settings() -> Settings:
    return Settings().with_values("plan", bucket=30.0).with_values("cost", base_currency="USD")


def _of_frames() -> Plan:
    """Typed cells, a symbol that looks like a number, one that looks like nothing."""
    orders = pd.DataFrame([desk.task(5_000, symbol=symbol) for symbol in ("0005", "NA")])
    orders["order_id"] = ["a, b", 'say "c"']
    market = pd.DataFrame([desk.name(symbol) for symbol in ("0005", "NA")])
    return plan(orders, market, settings=_settings(), **WHEN)


def _of_a_list() -> Plan:
    tables = {"orders": pd.DataFrame(listed.rows()), "market": pd.DataFrame(listed.market())}
    corridors = pd.DataFrame({"kind": ["net"], "lower": ["-40%"], "upper": ["40%"]})
    settings = listed.settings_of()
    return plan(
        **tables, **listed.RISK, corridors=corridors, soften=True, settings=settings, **WHEN
    )


def _of_holdings() -> Plan:
    legacy = pd.DataFrame({"symbol": ["OAK", "ELM"], "shares": [30_000, 500]})
    target = pd.DataFrame({"symbol": ["OAK", "FIR"], "shares": [1_000, 8_000]})
    market = pd.DataFrame(listed.market())
    return plan(None, market, legacy=legacy, target=target, settings=_settings(), **WHEN)


def _of_now() -> Plan:
    """Neither a date nor a time: both are the moment's, which the entry holds."""
    orders = pd.DataFrame([desk.task(5_000)])
    market = pd.DataFrame([desk.name() | {"calendar": "24/7", "profile": "flat"}])
    return plan(orders, market, settings=_settings())


def _of_doubts() -> Plan:
    """With estimates to draw from, and a robust choice over them and a law."""
    estimates = {"settings": {"relaxation": {"value": 0.05, "interval": [0.03, 0.09]}}}
    orders, market = pd.DataFrame([desk.task(5_000)]), pd.DataFrame([desk.name()])
    worlds = ("draws", "root-lasting")
    return plan(
        orders, market, uncertainty=estimates, worst_of=worlds, settings=_settings(), **WHEN
    )


MADE = {
    "doubts": _of_doubts,
    "files": _of_files,
    "finish": lambda: _of_files(finish=["0.05@15:00"], ignore_columns="a,b"),
    "frames": _of_frames,
    "list": _of_a_list,
    "holdings": _of_holdings,
    "now": _of_now,
}


@pytest.mark.parametrize("kind", MADE)
@pytest.mark.parametrize("parquet", [False, True])
def test_a_plan_is_reproduced(place: str, kind: str, parquet: bool) -> None:
    """Shares identical, figures alike at ten digits; the tables come back as the same inputs."""
    made = MADE[kind]()
    with Journal(place) as journal:
        record_plan(journal, made, parquet=parquet)
        found = reproduce(journal, "last")
        assert found.differences == ()
        assert found.elsewhere == ()
        assert found.same
        assert verify(journal).sound
    pd.testing.assert_frame_equal(found.plan.schedule, made.schedule)
    assert found.plan.notes == made.notes


def test_files_are_kept_byte_for_byte(place: str, tmp_path: Path) -> None:
    """What is exported is what was read and written, so that anybody's SHA-256 agrees."""
    made = _of_files()
    made.write(tmp_path / "out")
    with Journal(place) as journal:
        files = exported(journal, record_plan(journal, made))
    for name, path in FILES.items():
        assert files.pop(f"read-{name}.csv") == path.read_bytes()
    page = json.loads(files.pop("entry.json"))
    assert page["manifest"]["settings"]["plan"]["bucket"] == 30.0
    assert files == {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()}


def test_equal_inputs_are_kept_once(place: str) -> None:
    """Another urgency on the same four tables adds a schedule, a summary and a manifest."""
    with Journal(place) as journal:
        record_plan(journal, _of_files())
        before = journal.size().contents
        record_plan(journal, _of_files(settings=_settings().with_values("plan", urgency=1.0)))
        assert (before, journal.size().contents) == (4 + 3, 4 + 3 + 3)


def _tampered(place: str, name: str, change: Any) -> tuple[str, ...]:
    """What reproducing says of an entry whose file `name` was made other than it came out."""
    made = _of_files()
    with Journal(place) as journal:
        entry = record_plan(journal, made)
        manifest = manifest_of(journal, entry)
        files = made.files()
        files[name] = change(files[name])
        assert made.asked is not None
        record(
            journal, "plan", made.summary, files, read=made.asked.read(), asked=manifest["asked"]
        )
        return reproduce(journal, "last").differences


def test_a_share_or_figure_that_differs_is_told(place: str) -> None:
    """One share; a cost in its ninth digit; not one in its twelfth."""
    schedule = _of_files().schedule
    shares = f",{schedule['shares'].iloc[0]}".encode()
    (text,) = _tampered(place, "schedule.csv", lambda data: data.replace(shares, b",1.0", 1))
    assert text.startswith("schedule.csv, row 2, column shares: ")

    def moved(by: float) -> Any:
        def change(data: bytes) -> bytes:
            summary = json.loads(data)
            summary["orders"]["HB-1"]["expected_cost"] *= 1.0 + by
            return json.dumps(summary).encode()

        return change

    (text,) = _tampered(place, "summary.json", moved(1e-9))
    assert text.startswith("summary.json, orders, HB-1, expected_cost: ")
    assert _tampered(place, "summary.json", moved(1e-13)) == ()


def test_other_versions_are_told(place: str, monkeypatch: pytest.MonkeyPatch) -> None:
    with Journal(place) as journal:
        record_plan(journal, _of_files())
        monkeypatch.setattr("platform.machine", lambda: "abacus")
        (text,) = reproduce(journal, 1).elsewhere
    assert text.startswith("machine: ")
    assert text.endswith(" then, abacus now")


def test_what_is_no_plan_is_refused(place: str) -> None:
    with Journal(place) as journal:
        record(journal, "review", {"orders": {}}, {"review.json": b"{}"}, read={})
        with pytest.raises(MisuseError, match="entry 1: only plans"):
            reproduce(journal, 1)


def test_entries_are_compared(place: str) -> None:
    """Settings, inputs, figures and the shares that moved, beside the plans themselves."""
    one = _of_files()
    other = _of_files(settings=_settings().with_values("plan", urgency=1.0), readings=None)
    with Journal(place) as journal:
        record_plan(journal, one)
        record_plan(journal, other)
        found = compare(journal, 1, 2)
        assert compare(journal, 1, 1)["settings"] == {}
    assert found["entries"] == [1, 2]
    assert found["settings"] == {"plan.urgency": [None, 1.0]}
    assert found["inputs"] == {
        "orders": "same",
        "market": "same",
        "profiles": "same",
        "readings": "only in the first",
    }
    pair = [each.summary["orders"]["HB-2"]["expected_cost_bps"] for each in (one, other)]
    assert found["orders"]["HB-2"]["expected_cost_bps"] == pytest.approx(pair)
    slices = [
        each.schedule.query("order_id == 'HB-2'")["shares"].to_numpy() for each in (one, other)
    ]
    assert found["orders"]["HB-2"]["moved"] == pytest.approx(abs(slices[0] - slices[1]).sum() / 2.0)
    assert found["orders"]["HB-2"]["moved"] > 0.0


def test_inputs_are_read_as_they_were(place: str, tmp_path: Path) -> None:
    """Parquet stays Parquet; the file may be gone when it is planned again."""
    path = tmp_path / "orders.parquet"
    pd.read_csv(FILES["orders"]).to_parquet(path)
    data = path.read_bytes()
    made = _of_files(orders=path)
    path.unlink()
    with Journal(place) as journal:
        entry = record_plan(journal, made)
        assert inputs_of(journal, manifest_of(journal, entry))["orders"].data == data
        assert reproduce(journal, 1).same


def test_orders_named_like_nothing_are_compared(place: str) -> None:
    """NA and null are names; their shares move as any other's."""
    orders = pd.DataFrame([{**desk.task(9_000), "order_id": name} for name in ("NA", "null")])
    market = pd.DataFrame([desk.name()])
    made = [
        plan(orders, market, settings=_settings().with_values("plan", urgency=urgency), **WHEN)
        for urgency in (0.0, 3.0)
    ]
    with Journal(place) as journal:
        for each in made:
            record_plan(journal, each)
        found = compare(journal, 1, 2)["orders"]
    for name in ("NA", "null"):
        one, other = (
            each.schedule.loc[each.schedule["order_id"] == name, "shares"].to_numpy()
            for each in made
        )
        assert found[name]["moved"] == pytest.approx(abs(one - other).sum() / 2.0)
