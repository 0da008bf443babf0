"""What goes into an entry: inputs and outputs by hash, what was asked, settings, versions."""

from __future__ import annotations

import getpass
import platform
import sys
from collections import Counter
from collections.abc import Mapping
from typing import Any

from scheduler.journal.chain import Entry, digest
from scheduler.journal.store import Journal
from scheduler.plan import Asked, Plan
from scheduler.tables.source import Stored

_LIBRARIES = ("numpy", "scipy", "pandas", "exchange_calendars", "cvxpy")
_CERTAINTY = ("proven", "bounded", "local")  # from the best on


def record_plan(journal: Journal, plan: Plan, *, parquet: bool = False) -> Entry:
    """Keep a plan, its outputs as they are written: CSV or Parquet."""
    asked = plan.asked
    return record(
        journal,
        "plan",
        plan.summary,
        plan.files(parquet=parquet),
        read={} if asked is None else asked.read(),
        asked=None if asked is None else asked_as_data(asked, plan),
    )


def record(
    journal: Journal,
    kind: str,
    summary: Mapping[str, Any],
    files: Mapping[str, bytes],
    *,
    read: Mapping[str, Stored],
    asked: Mapping[str, Any] | None = None,
) -> Entry:
    """Keep the result of a verb.

    kind : the verb. summary : as it is written, with `settings`. files : what is written, by name.
    read : all that was read, by option. asked : what else it takes to ask again, as plain data.
    """
    inputs, outputs = {}, {}
    contents: list[bytes] = []
    for name, stored in read.items():
        named = _named(stored.data)
        inputs[name] = {"source": stored.source, "form": stored.form, **named}
        contents.append(stored.data)
    for name, data in files.items():
        outputs[name] = _named(data)
        contents.append(data)
    manifest = {
        "kind": kind,
        "inputs": inputs,
        "outputs": outputs,
        "asked": asked,
        "settings": summary.get("settings"),
        "certificate": _certificate(summary),
        "versions": {"headrace": summary.get("version"), **versions()},
        "made_by": {"user": _user(), "host": platform.node()},
    }
    return journal.append(kind, brief=_brief(summary), manifest=manifest, contents=contents)


def asked_as_data(asked: Asked, plan: Plan) -> dict[str, Any]:
    """What a plan was asked for beside tables and settings, for JSON."""
    return {
        "date": plan.summary["date"],
        "at": asked.at,
        "now": asked.now.isoformat(),
        "finish": [item.text for item in asked.finish],
        "soften": asked.soften,
        "worst_of": [] if asked.doubts is None else list(asked.doubts.worst_of),
        "ignore_columns": list(asked.ignore_columns),
    }


def versions() -> dict[str, str]:
    """Of what may move a last digit: Python, the machine, the libraries that are loaded."""
    known = {"python": platform.python_version()}
    known |= {"system": platform.system(), "machine": platform.machine()}
    for name in _LIBRARIES:
        # reading a distribution's files instead would take as long as all the rest of an entry
        found = getattr(sys.modules.get(name), "__version__", None)
        if found is not None:
            known[name] = str(found)
    return known


def _named(data: bytes) -> dict[str, Any]:
    return {"sha256": digest(data), "bytes": len(data)}


def _brief(summary: Mapping[str, Any]) -> dict[str, Any]:
    """What a listing shows of an entry."""
    total = summary.get("total", {})
    statuses = [row["status"] for row in _certificates(summary)]
    return {
        "session": summary.get("date"),
        "orders": len(summary.get("orders", ())),
        "currency": summary.get("currency"),
        "notional": _number(total.get("notional")),
        "cost_bps": _number(total.get("expected_cost_bps")),
        "optimum": max(statuses, key=_CERTAINTY.index) if statuses else None,
    }


def _certificate(summary: Mapping[str, Any]) -> dict[str, Any]:
    """How sure the optima are: how many of each status, and the worst of each figure."""
    rows = _certificates(summary)
    counts = Counter(row["status"] for row in rows)
    worst = {
        f"worst_{key}": max(known)
        for key in ("gap", "kkt_residual", "rounding_loss")
        if (known := [x for row in rows if (x := _number(row.get(key))) is not None])
    }
    return {**counts, **worst}


def _certificates(summary: Mapping[str, Any]) -> list[Mapping[str, Any]]:
    """Of every order; of a list planned as one, the list's."""
    if "certificate" in summary.get("total", {}):
        return [summary["total"]["certificate"]]
    return [
        row["certificate"] for row in summary.get("orders", {}).values() if "certificate" in row
    ]


def _number(value: Any) -> float | None:
    """A number that JSON can hold."""
    number = None if value is None else float(value)
    return number if number is not None and abs(number) < float("inf") else None


def _user() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError):  # an account without a name
        return ""
