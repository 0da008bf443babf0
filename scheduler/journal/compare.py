"""Two entries beside each other: what was asked, what was read, what came of it."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from scheduler.journal.reading import manifest_of, outputs_of, slices_of
from scheduler.journal.store import Journal

_FIGURES = ("quantity", "expected_cost_bps", "cost_std_bps")


def compare(journal: Journal, one: str | int, other: str | int) -> dict[str, Any]:
    """What differs between two entries, as plain data.

    Returns:
        `entries` (numbers), `asked`, `settings`, `versions` (by dotted name, [one, other]),
        `inputs` (by table: same, changed, only in the first, only in the second), `total` and
        `orders` (figures of both as [one, other]) and, of each order, `moved`: the shares that
        trade at another time, half of the sum of absolute differences.
    """
    entries = [journal.entry(name) for name in (one, other)]
    manifests = [manifest_of(journal, entry) for entry in entries]
    files = [outputs_of(journal, manifest) for manifest in manifests]
    summaries = [json.loads(each.get("summary.json", b"{}")) for each in files]
    orders = _orders(summaries)
    for name, moved in _moved(files).items():
        orders.setdefault(name, {})["moved"] = moved
    return {
        "schema": 1,
        "entries": [entry.number for entry in entries],
        **{
            part: _changed(*(dict(_flat(manifest[part] or {})) for manifest in manifests))
            for part in ("asked", "settings", "versions")
        },
        "inputs": _inputs(*(manifest["inputs"] for manifest in manifests)),
        "total": _pairs(*(summary.get("total", {}) for summary in summaries)),
        "orders": orders,
    }


def _flat(data: Mapping[str, Any], before: str = "") -> Iterator[tuple[str, Any]]:
    for key, value in data.items():
        if isinstance(value, Mapping):
            yield from _flat(value, f"{before}{key}.")
        else:
            yield f"{before}{key}", value


def _changed(one: dict[str, Any], other: dict[str, Any]) -> dict[str, list[Any]]:
    return {
        key: [one.get(key), other.get(key)]
        for key in {**one, **other}
        if one.get(key) != other.get(key)
    }


def _inputs(one: dict[str, Any], other: dict[str, Any]) -> dict[str, str]:
    words = {}
    for name in {**one, **other}:
        if name not in one or name not in other:
            words[name] = f"only in the {'first' if name in one else 'second'}"
        else:
            same = one[name]["sha256"] == other[name]["sha256"]
            words[name] = "same" if same else "changed"
    return words


def _pairs(one: Mapping[str, Any], other: Mapping[str, Any]) -> dict[str, list[Any]]:
    return {key: [one.get(key), other.get(key)] for key in _FIGURES if key in one or key in other}


def _orders(summaries: list[dict[str, Any]]) -> dict[str, dict[str, Any]]:
    one, other = (summary.get("orders", {}) for summary in summaries)
    return {name: _pairs(one.get(name, {}), other.get(name, {})) for name in {**one, **other}}


def _moved(files: list[dict[str, bytes]]) -> dict[str, float]:
    """Shares of each order that trade at another time, of the orders in both."""
    tables = [table for each in files if (table := slices_of(each)) is not None]
    if len(tables) < 2:
        return {}
    one, other = (table.groupby(["order_id", "start"])["shares"].sum() for table in tables)
    apart = one.sub(other, fill_value=0.0).abs().groupby("order_id").sum() / 2.0
    both = np.intersect1d(
        one.index.get_level_values(0).unique(), other.index.get_level_values(0).unique()
    )
    return {str(name): float(apart[name]) for name in both}
