"""Lists that cannot be planned: corridors that nobody keeps, tables that do not fit; --soften."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import Result

from scheduler import InfeasibleError, InputError, MisuseError
from tests.cli.running import Put, run
from tests.desk import Row
from tests.listed import (
    COVARIANCE,
    EXPOSURES,
    GROSS,
    QUANTITY,
    RISK,
    SIGNED,
    corridor,
    listed,
    market,
    rows,
)
from tests.samples import csv_text

# what cannot be kept


def _refused(**options: Any) -> str:
    with pytest.raises(InfeasibleError) as caught:
        listed(**RISK, **options)
    return str(caught.value)


def test_a_corridor_that_no_schedule_keeps_is_named() -> None:
    """Which, when, its bounds, and the least amount by which it must give: with more it is kept."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    text = _refused(corridors=asked)
    assert "corridor gross: no schedule keeps [-inf, " in text
    assert "2026-03-05T09:30:00-05:00" in text
    assert "use --soften" in text
    amount = float(text.split("gives way by ")[1].split()[0].replace(",", ""))
    assert 0.5 * GROSS < amount < 0.9 * GROSS
    for extra, kept in ((-100.0, False), (100.0, True)):
        upper = 0.1 * GROSS + amount + extra
        again = corridor("gross", upper=f"{upper:.2f}", **{"from": "", "to": "09:30"})
        if kept:
            listed(**RISK, corridors=again)
        else:
            assert "corridor gross: no schedule keeps" in _refused(corridors=again)


def test_the_conic_solver_refuses_and_softens_alike() -> None:
    """The same words, the same excess."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    conic = {"aim": {"solver": "conic"}}
    assert _refused(corridors=asked, **conic) == _refused(corridors=asked)
    one, other = (
        listed(**RISK, corridors=asked, soften=True, **aim).summary["total"] for aim in ({}, conic)
    )
    assert other["corridor_excess"] == pytest.approx(one["corridor_excess"], abs=2e-4 * GROSS)


def test_softened_corridors_give_way_by_the_least() -> None:
    """A note for each, the schedule complete, the excess as the refusal announced it."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    refused = _refused(corridors=asked)
    amount = float(refused.split("gives way by ")[1].split()[0].replace(",", ""))
    result = listed(**RISK, corridors=asked, soften=True)
    notes = [note for note in result.notes if note.startswith("softened: corridor gross")]
    assert len(notes) == 1
    excess = result.summary["total"]["corridor_excess"]["gross"]
    assert excess == pytest.approx(amount, abs=np.abs(SIGNED).sum())
    assert result.schedule.groupby("order_id")["shares"].sum().sum() == sum(QUANTITY)


@pytest.mark.parametrize(
    ("kind", "side", "value"),
    [("cash", "upper", SIGNED @ QUANTITY), ("net", "lower", 0.0), ("gross", "lower", 0.0)],
)
def test_a_corridor_that_excludes_its_final_value_is_refused_with_it(
    kind: str, side: str, value: float
) -> None:
    """When all is traded nobody can change it; softened, it ends before, with a note."""
    beyond = value - 5_000.0 if side == "upper" else value + 5_000.0
    asked = corridor(kind, **{side: beyond})
    text = _refused(corridors=asked)
    assert f"corridor {kind}: at 2026-03-05T16:00:00-05:00 it is {value:,.0f}" in text
    assert "whatever the schedule" in text
    free = corridor(kind, **{side: beyond}, **{"from": "", "to": "14:00"})
    listed(**RISK, corridors=free, soften=True)
    notes = listed(**RISK, corridors=asked, soften=True).notes
    assert any(note.startswith(f"softened: corridor {kind}: at 2026-03-05T16:00") for note in notes)


# combinations that are not there yet


@pytest.mark.parametrize(
    ("columns", "options", "what"),
    [
        ({"min_slice": 100}, {}, "min_slice"),
        ({}, {"aim": {"solver": "conic", "risk_budget": 50.0}}, "solver conic with a budget"),
    ],
)
@pytest.mark.parametrize("tie", [RISK, {"corridors": corridor("cash", "-50%", "50%")}])
def test_unsupported_combinations_are_refused(
    columns: Row, options: dict[str, Any], what: str, tie: dict[str, pd.DataFrame]
) -> None:
    """Named, with what to do; the same orders alone are planned."""
    with pytest.raises(MisuseError, match=f"{what}.* cannot be combined") as caught:
        listed(rows(**columns), **tie, **options)
    assert "plan these orders alone" in str(caught.value)


def test_risk_tables_that_do_not_fit() -> None:
    """Exposures without a covariance, or beside a history of returns; a factor of one only."""
    with pytest.raises(MisuseError, match="belong together"):
        listed(exposures=EXPOSURES)
    with pytest.raises(MisuseError, match="not both"):
        listed(**RISK, returns=EXPOSURES)
    with pytest.raises(InputError, match="is no factor of the factor_covariance"):
        listed(exposures=EXPOSURES.assign(value=0.5), factor_covariance=COVARIANCE)
    with pytest.raises(InputError, match="names no known group"):
        listed(**RISK, corridors=corridor("group:nowhere", "-5%", "5%"))
    with pytest.raises(InputError, match="names no known factor"):
        listed(corridors=corridor("factor:market", "-5%", "5%"))


# the command


@pytest.fixture
def files(put: Put) -> dict[str, str]:
    tables = {"orders": rows(), "market": market()}
    frames = {key: pd.DataFrame(table) for key, table in tables.items()}
    frames |= {"exposures": EXPOSURES, "factor-covariance": COVARIANCE}
    return {key: put(f"{key}.csv", csv_text(frame.astype(str))) for key, frame in frames.items()}


def _run(files: dict[str, str], *more: object) -> Result:
    named = [word for key in files if key != "orders" for word in (f"--{key}", files[key])]
    when = ("--date", "2026-03-05", "--at", "09:30", "--bucket", "30")
    return run(files["orders"], *named, *when, *more)


@pytest.fixture
def base(put: Put) -> tuple[str, str]:
    return ("--settings", put("settings.toml", '[cost]\nbase_currency = "USD"\n'))


def test_the_command_writes_balances_too(
    files: dict[str, str], put: Put, base: tuple[str, str], tmp_path: Path
) -> None:
    """Beside schedule and summary, as CSV or Parquet; a plan of orders alone takes them away."""
    corridors = put("corridors.csv", csv_text(corridor("cash", "-5%", "5%")))
    out = tmp_path / "out"
    result = _run(files | {"corridors": corridors}, *base, "--out", out)
    assert result.exit_code == 0
    assert sorted(p.name for p in out.iterdir()) == ["balances.csv", "schedule.csv", "summary.json"]
    frame = pd.read_csv(out / "balances.csv")
    assert frame["gross"].iat[-1] == pytest.approx(0.0, abs=1e-6)
    summary = json.loads((out / "summary.json").read_text())
    assert summary["total"]["certificate"]["status"] == "proven"
    assert _run(files, *base, "--out", out, "--parquet").exit_code == 0
    written = sorted(p.name for p in out.iterdir())
    assert written == ["balances.parquet", "schedule.parquet", "summary.json"]
    alone = {key: files[key] for key in ("orders", "market")}
    assert _run(alone, *base, "--out", out).exit_code == 0
    assert sorted(p.name for p in out.iterdir()) == ["schedule.csv", "summary.json"]


def test_the_command_refuses_and_softens(
    files: dict[str, str], put: Put, base: tuple[str, str], tmp_path: Path
) -> None:
    """Exit status 1, nothing written; with --soften 0, and the note on standard error."""
    asked = corridor("gross", upper="10%", **{"from": "", "to": "10:00"})
    tables = files | {"corridors": put("corridors.csv", csv_text(asked))}
    out = tmp_path / "out"
    refused = _run(tables, *base, "--out", out)
    assert refused.exit_code == 1
    assert refused.stdout == ""
    assert not out.exists()
    assert "corridor gross: no schedule keeps" in refused.stderr
    assert "2026-03-05T09:30:00-05:00" in refused.stderr
    assert "Traceback" not in refused.stderr
    softened = _run(tables, *base, "--out", out, "--soften")
    assert softened.exit_code == 0
    assert "Note: softened: corridor gross" in softened.stderr
    assert (out / "balances.csv").exists()


BAD = {
    "a symbol without exposures": ("exposures", EXPOSURES[:-1], "BAY"),
    "a factor without covariance": ("factor-covariance", COVARIANCE.iloc[:1, :2], "size"),
    "an exposure that is no number": ("exposures", EXPOSURES.replace(1.1, "high"), "high"),
    "a kind of corridor there is not": ("corridors", corridor("cahs", upper="5%"), "cahs"),
    "a corridor without sides": ("corridors", corridor("cash"), "no limit on either side"),
    "a corridor turned over": ("corridors", corridor("cash", "5%", "-5%"), "above upper"),
    "a factor nobody knows": ("corridors", corridor("factor:beta", "0", "1"), "beta"),
    "a time that is none": ("corridors", corridor("cash", "0", **{"from": "noon"}), "noon"),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_tables_of_a_list(
    case: str, files: dict[str, str], put: Put, base: tuple[str, str], tmp_path: Path
) -> None:
    """Exit status 2, the place named, nothing written."""
    table, frame, word = BAD[case]
    tables = files | {table: put(f"bad-{table}.csv", csv_text(frame.astype(str)))}
    out = tmp_path / "out"
    result = _run(tables, *base, "--out", out)
    assert result.exit_code == 2
    assert not out.exists()
    assert word in result.stderr
    assert f"bad-{table}.csv" in result.stderr
    assert "Traceback" not in result.stderr


def test_unsupported_on_the_command_line(
    files: dict[str, str], base: tuple[str, str], tmp_path: Path
) -> None:
    """Exit status 2 and nothing written."""
    out = tmp_path / "out"
    words = ("--solver", "conic", "--risk-budget", "50")
    result = _run(files, *base, "--out", out, *words)
    assert result.exit_code == 2
    assert "cannot be combined" in result.stderr
    assert not out.exists()
