"""Estimates with their 95 % intervals (JSON): what is known of parameters, and how well.

{"settings": {"relaxation": {"value": 0.05, "interval": [0.03, 0.09]},
              "daily_vol:OAKMERE": {"value": 0.018, "interval": [0.016, 0.021]}, ...}}

A name alone stands for every order, `name:SYMBOL` for those of one symbol. Estimates of anything
else, and other keys of the file, are passed over.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from scheduler.errors import InputError, MisuseError, Problem
from scheduler.settings import ModelSettings
from scheduler.tables.source import Stored, bytes_of

_COLUMNS = ("relaxation", "impact_coefficient", "impact_exponent")
_OWN = ("adv", "daily_vol")
PARAMETERS = ("level_rate", "reading_weight", *_COLUMNS, *_OWN)
"""What an estimate may speak of: settings, and columns of the market table."""
BY_SYMBOL = (*_COLUMNS, *_OWN)
"""What may differ from symbol to symbol; `_OWN` must."""
ON_A_LINE = ("impact_exponent", "reading_weight")
"""Not scales: errors add to them and do not multiply them."""
RANGES: dict[str, tuple[float, float]] = {
    **{
        item.name: (item.metadata["low"], item.metadata["high"])
        for item in fields(ModelSettings)
        if item.name in PARAMETERS
    },
    **dict.fromkeys(_OWN, (1e-12, 1e15)),
}


@dataclass(frozen=True)
class Estimate:
    """low <= value <= high; `symbol` None: of every order."""

    name: str
    symbol: str | None
    value: float
    low: float
    high: float


@dataclass(frozen=True)
class Estimates:
    """Checked estimates, what their reader should know, and what was read."""

    items: tuple[Estimate, ...]
    notes: tuple[str, ...]
    source: str
    file: Stored | None = field(default=None, repr=False)


def read_estimates(source: str | Path | Mapping[str, Any] | Stored) -> Estimates:
    """Estimates of a file, or of what such a file holds.

    Raises:
        InputError: if the file cannot be read, or with everything wrong with it.
        MisuseError: neither a path nor a mapping.
    """
    if isinstance(source, Mapping):
        data = json.dumps(source, default=str).encode()
        return replace(_checked(source, "uncertainty"), file=Stored("uncertainty", data, "json"))
    if isinstance(source, Stored):
        return _decoded(source)
    if not isinstance(source, (str, Path)):
        raise MisuseError(f"uncertainty must be a path, or what such a file holds, not {source!r}")
    return _decoded(Stored(str(source), bytes_of(source), "json"))


def _decoded(file: Stored) -> Estimates:
    name = file.source
    try:
        data = json.loads(file.data.decode("utf-8-sig"))
    except UnicodeDecodeError:
        raise InputError([_of_file(name, "is not UTF-8 text", "save it in UTF-8")]) from None
    except (ValueError, RecursionError) as error:
        rule = f"is no well-formed JSON ({error})"
        raise InputError([_of_file(name, rule, "write it as calibrate does")]) from None
    return replace(_checked(data, name), file=file)


def _of_file(source: str, rule: str, remedy: str) -> Problem:
    return Problem(source, None, None, None, rule, remedy)


def _checked(data: Any, source: str) -> Estimates:
    rows = data.get("settings") if isinstance(data, Mapping) else None
    if not isinstance(rows, Mapping):
        remedy = 'write {"settings": {"relaxation": {"value": 0.05, "interval": [0.03, 0.09]}}}'
        raise InputError([_of_file(source, "has no estimates", remedy)])
    found: list[Problem] = []
    items, passed, notes = [], [], []
    for key, row in rows.items():
        name, _, symbol = str(key).partition(":")
        if name not in PARAMETERS:
            passed.append(str(key))
            found += _misspelt(source, str(key), name)
            continue
        numbers = _numbers(row)
        wrong = [
            *_misplaced(source, str(key), name, symbol),
            *_wrong(source, str(key), name, row, numbers),
        ]
        found += wrong
        if not wrong and numbers is not None:
            value, low, high = numbers
            items.append(Estimate(name, symbol or None, value, min(low, value), max(high, value)))
            if not low <= value <= high:
                notes.append(f"{source}: the interval of {key} is widened to hold its value")
    if not found and not items:
        rule = "has no estimate that a plan could use"
        found.append(_of_file(source, rule, f"give some of {', '.join(PARAMETERS)}"))
    if found:
        raise InputError(found)
    if passed:
        notes.append(f"estimates that no plan uses are passed over: {', '.join(passed[:10])}")
    return Estimates(tuple(items), tuple(notes), source)


def _misspelt(source: str, key: str, name: str) -> list[Problem]:
    near = get_close_matches(name, PARAMETERS, n=1, cutoff=0.8)
    if not near:
        return []
    return [Problem(source, None, key, None, "unknown estimate", f"did you mean {near[0]!r}?")]


def _misplaced(source: str, key: str, name: str, symbol: str) -> list[Problem]:
    if symbol and name not in BY_SYMBOL:
        remedy = f"give {name} alone"
        return [Problem(source, None, key, None, "is the same for every symbol", remedy)]
    if name in _OWN and not symbol:
        remedy = f"give {name}:SYMBOL for each symbol"
        return [Problem(source, None, key, None, "differs from symbol to symbol", remedy)]
    return []


def _wrong(
    source: str, key: str, name: str, row: Any, numbers: tuple[float, float, float] | None
) -> list[Problem]:
    """What is wrong with one estimate's numbers."""
    if numbers is None:
        remedy = 'write {"value": 0.05, "interval": [0.03, 0.09]}'
        return [Problem(source, None, key, str(row), "is no number with its interval", remedy)]
    value, low, high = numbers
    least, most = RANGES[name]
    if not least <= value <= most:
        rule, remedy = f"must be from {least:g} to {most:g}", "correct it, or leave it out"
        return [Problem(source, None, f"{key}.value", f"{value:g}", rule, remedy)]
    if low > high:
        rule, remedy = "ends before it begins", "write the low end first"
        return [Problem(source, None, f"{key}.interval", f"{low:g}, {high:g}", rule, remedy)]
    return []


def _numbers(row: Any) -> tuple[float, float, float] | None:
    """Value, low and high end; None where that is not what stands there."""
    if not isinstance(row, Mapping) or not isinstance(row.get("interval"), Sequence):
        return None
    given = [row.get("value"), *row["interval"]]
    if len(given) != 3 or not all(map(_is_number, given)):
        return None
    value, low, high = map(float, given)
    return value, low, high


def _is_number(value: Any) -> bool:
    number = isinstance(value, (int, float)) and not isinstance(value, bool)
    return number and math.isfinite(value)
