"""A written plan read back: planned again from its tables, and held against what was written."""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pandas as pd

from scheduler.errors import InputError, MisuseError, Problem
from scheduler.plan import Plan, plan
from scheduler.settings import settings_from_dict

_SCHEMA = 1
_SUFFIXES = ("csv", "parquet", "pq")
_CLOSE = 1e-6  # of a lot


def read_plan(directory: str | Path, *, ignore_columns: Iterable[str] = ()) -> Plan:
    """The plan that `plan --out` wrote.

    Its tables are looked for where they were, as seen from here and from the directory, and in the
    directory itself, by their own name or that of the table.

    Raises:
        InputError: no plan there, or a table that is not found.
        MisuseError: the tables no longer give the schedule that was written, by more than a lot.
    """
    folder = Path(directory)
    summary = _summary(folder)
    if "replanned" in summary:
        begun = summary["replanned"].get("plan") or "the plan it was made from"
        raise MisuseError(
            f"{folder} is itself a re-plan; give the first plan, {begun}, and all fills since then"
        )
    written = _schedule(folder)
    tables = {name: _found(folder, name, str(place)) for name, place in summary["inputs"].items()}
    orders, market = tables.pop("orders", None), tables.pop("market")
    worlds = summary["total"].get("worst_of", {}).get("worlds", ())
    if not worlds:
        tables.pop("uncertainty", None)  # which says more of a plan, but does not change it
    at = min(str(summary["at"]), str(written["start"].min()), key=pd.Timestamp)
    made = plan(
        orders,
        market,
        settings=settings_from_dict(summary["settings"], str(folder / "summary.json")),
        date=summary["date"],
        at=at,
        soften=any(note.startswith("softened:") for note in summary["notes"]),
        ignore_columns=ignore_columns,
        worst_of=worlds,
        **tables,  # type: ignore[arg-type]
    )
    _check_same(folder, made, written)
    return replace(made, read_from=str(folder))


def _summary(folder: Path) -> dict[str, Any]:
    path = folder / "summary.json"
    try:
        summary = json.loads(path.read_text(encoding="utf-8"))
    except OSError:
        raise _refused(path, "there is no plan here", "give the DIR of plan --out DIR") from None
    except ValueError:
        raise _refused(path, "is no summary of a plan", "write the plan again") from None
    wanted = {"schema", "total", "orders", "inputs", "settings", "date", "at", "notes"}
    if not isinstance(summary, dict) or not wanted <= set(summary):
        raise _refused(path, "is no summary of a plan", "write the plan again")
    if summary["schema"] != _SCHEMA:
        rule = f"is of schema {summary['schema']}, not {_SCHEMA}"
        raise _refused(path, rule, "write the plan again with this version")
    return summary


def _schedule(folder: Path) -> pd.DataFrame:
    """order_id, start and shares as they were written."""
    columns = ["order_id", "bucket", "start", "shares"]
    if (folder / "schedule.parquet").exists():
        return pd.read_parquet(folder / "schedule.parquet", columns=columns)
    path = folder / "schedule.csv"
    try:
        texts = {"order_id": str, "start": str}
        return pd.read_csv(path, usecols=columns, dtype=texts, keep_default_na=False)
    except (OSError, ValueError):
        rule = "there is no schedule here, or none that can be read"
        raise _refused(path, rule, "write the plan again") from None


def _found(folder: Path, name: str, place: str) -> str:
    """Where a table is now."""
    path = Path(place)
    named = [folder / f"{name}.{suffix}" for suffix in _SUFFIXES]
    for candidate in (path, folder / path, folder / path.name, *named):
        if candidate.is_file():
            return str(candidate)
    raise _refused(
        Path(place),
        f"the plan's {name} table is not there any more",
        f"put it back, or into {folder} as {name}.csv",
    )


def _check_same(folder: Path, made: Plan, written: pd.DataFrame) -> None:
    keys = ["order_id", "bucket"]
    both = made.schedule[[*keys, "shares"]].merge(
        written, on=keys, how="outer", suffixes=("", "_written"), validate="1:1"
    )
    lots = dict(zip(made.book.names, made.book.lot.tolist(), strict=True))
    apart = (both["shares"] - both["shares_written"]).abs()
    off = both[~(apart <= both["order_id"].map(lots) * (1.0 + _CLOSE))]
    if off.empty:
        return
    first = off.iloc[0]
    raise MisuseError(
        f"the tables no longer give the plan in {folder}: order {first['order_id']}, bucket "
        f"{first['bucket']}, has {first['shares_written']:,.10g} shares there and "
        f"{first['shares']:,.10g} now; put back the tables as they were (copies of them in "
        f"{folder} will do, as orders.csv, market.csv and so on)"
    )


def _refused(path: Path, rule: str, remedy: str) -> InputError:
    return InputError([Problem(str(path), None, None, None, rule, remedy)])
