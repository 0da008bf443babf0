"""Column rules as data: what a cell may hold, what stands for an empty one, and how to say no.

Converting a column gives its typed values and the flaws found, as masks over its rows.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import Field, dataclass
from typing import Any, TypeAlias

import numpy as np
import pandas as pd

from scheduler.tables.cells import CellError, identifier

Mask: TypeAlias = np.ndarray[Any, np.dtype[np.bool_]]

NUMBER = r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
_NOT_NUMBERS = (
    (
        r"[+-]?[0-9][0-9 '_.\u00a0\u202f,]*,[0-9]*",
        "has a comma in a number",
        "write it without thousands separators and with a decimal point, as in 1234.5",
    ),
    (
        r"[+-]?[0-9][0-9 '_\u00a0\u202f]*[0-9](?:\.[0-9]*)?",
        "has a thousands separator",
        "write the digits without separators",
    ),
    (r"[+-]?[0-9.]+ ?%", "is written as a percentage", "write a plain number: 5% is 0.05"),
    (r"(?i)[+-]?(?:nan|inf|infinity)", "is not finite", "write a number"),
    (r"(?s).*", "is not a number", "write a number with a decimal point"),
)


@dataclass(frozen=True)
class Flaw:
    """Rows (a mask) of one column that break one rule."""

    mask: Mask
    rule: str
    remedy: str


@dataclass(frozen=True)
class Column:
    """One column of a table.

    `doc` says meaning and unit, `empty` what an empty cell stands for; `kept` is False for a
    column that is known only to be refused.
    """

    name: str
    doc: str
    required: bool = False
    default: Any = None
    empty: str = ""
    kept: bool = True
    dtype: str = "float64"

    def convert(self, cells: pd.Series[str]) -> tuple[pd.Series[Any], list[Flaw]]:
        """Typed values (default where empty or flawed) and the flaws."""
        raise NotImplementedError

    def absent(self, count: int) -> pd.Series[Any]:
        """The values of the column where the table does not have it."""
        kind = "object" if self.default is None else self.dtype
        return pd.Series([self.default] * count, dtype=kind)

    def _empty(self, empty: Mask) -> list[Flaw]:
        if not self.required or not empty.any():
            return []
        return [Flaw(empty, "must not be empty", f"fill it in: {self.doc}")]


@dataclass(frozen=True)
class Number(Column):
    """A float64 column within [low, high], or (low, high] if `above`; missing is NaN."""

    default: float = math.nan
    low: float = -math.inf
    high: float = math.inf
    above: bool = False
    remedy: str = ""

    def convert(self, cells: pd.Series[str]) -> tuple[pd.Series[Any], list[Flaw]]:
        """Typed values and flaws of a text column."""
        cells = cells.str.strip()
        empty = _mask(cells == "")
        good = _mask(cells.str.fullmatch(NUMBER))
        values = np.full(len(cells), self.default, dtype=np.float64)
        values[good] = cells[good].to_numpy(dtype=object).astype(np.float64)
        flaws = self._empty(empty)
        if not (good | empty).all():
            flaws += _number_flaws(cells, ~(good | empty))
        infinite = good & np.isinf(values)
        if infinite.any():
            flaws.append(Flaw(infinite, "is too large for a number", "check it"))
        outside = good & ~infinite & ~self._inside(values)
        if outside.any():
            flaws.append(
                Flaw(outside, f"must be {self.range}", self.remedy or f"expected: {self.doc}")
            )
        values[outside | infinite] = math.nan
        return pd.Series(values), flaws

    @property
    def range(self) -> str:
        """The range in words."""
        if math.isinf(self.low) and math.isinf(self.high):
            return "finite"
        if math.isinf(self.high):
            return f"above {self.low:g}" if self.above else f"at least {self.low:g}"
        if self.above:
            return f"above {self.low:g} and at most {self.high:g}"
        return f"from {self.low:g} to {self.high:g}"

    def _inside(self, values: np.ndarray[Any, np.dtype[np.float64]]) -> Mask:
        over = values > self.low if self.above else values >= self.low
        return np.asarray(over & (values <= self.high))


@dataclass(frozen=True)
class Words(Column):
    """A column whose distinct texts are read one by one by `parse`; missing is `default`.

    `dtype` is that of the finished table; while it is being checked a flawed cell is None.
    """

    parse: Callable[[str], Any] = identifier
    dtype: str = "object"

    def convert(self, cells: pd.Series[str]) -> tuple[pd.Series[Any], list[Flaw]]:
        """Typed values and flaws of a text column."""
        codes, distinct = pd.factorize(cells)
        values: list[Any] = []
        refused: dict[tuple[str, str], list[int]] = {}
        for code, text in enumerate(distinct.tolist()):
            value = self.default
            try:
                if text:
                    value = self.parse(text)
            except CellError as error:
                refused.setdefault((error.rule, error.remedy), []).append(code)
            values.append(value)
        flaws = self._empty(_mask(cells == ""))
        flaws += [Flaw(np.isin(codes, bad), *words) for words, bad in refused.items()]
        lookup = np.empty(len(values), dtype=object)
        lookup[:] = values
        return pd.Series(lookup[codes], dtype=object), flaws


def like_setting(item: Field[Any], doc: str) -> Number:
    """A number column with the name and the range of the setting it overrides."""
    low, high = item.metadata["low"], item.metadata["high"]
    return Number(item.name, doc, empty="the setting", low=low, high=high)


def why_no_number(text: str) -> CellError:
    """What is wrong with a text that should have been a number."""
    words = (words for pattern, *words in _NOT_NUMBERS if re.fullmatch(pattern, text))
    return CellError(*next(words))


def _number_flaws(cells: pd.Series[str], bad: Mask) -> list[Flaw]:
    flaws, left = [], bad
    for pattern, rule, remedy in _NOT_NUMBERS:
        hit = np.zeros_like(left)
        hit[left] = _mask(cells[left].str.fullmatch(pattern))
        if hit.any():
            flaws.append(Flaw(hit, rule, remedy))
            left = left & ~hit
        if not left.any():
            break
    return flaws


def _mask(values: pd.Series[bool]) -> Mask:
    return values.to_numpy(dtype=np.bool_)
