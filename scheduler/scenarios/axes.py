"""The axes of a grid, their rules as data, and the grid itself.

A world axis is what nobody chooses (how much volume comes, which impact law is true); a choice
axis is what a trader decides. Values come as numbers and texts, or as text like
`0,0.01:10:20`: values and ranges `first:last:count` separated by commas. A range is even in the
logarithm on axes that are scales (`logarithmic`), and even as it stands on the others.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import Field, dataclass, field, fields
from difflib import get_close_matches
from typing import Any, TypeAlias

import numpy as np

from scheduler.errors import InputError, MisuseError, Problem
from scheduler.settings import ModelSettings, PlanSettings, broken_rule, number, text
from scheduler.tables import readings
from scheduler.tables.cells import CellError
from scheduler.tables.columns import Number
from scheduler.tables.times import moment

MOST = 10_000_000
"""Points times orders beyond which a grid is refused."""

AIMS = ("urgency", "risk_aversion")
TIMES = ("start", "end")
CLOCK = (*TIMES, "bucket")
"""Axes that change an order's buckets."""

Value: TypeAlias = float | str
Values: TypeAlias = str | float | Iterable[Value]


def _readings_range() -> tuple[float, float]:
    column = next(item for item in readings.TABLE.columns if item.name == "imbalance")
    assert isinstance(column, Number)
    return column.low, column.high


@dataclass(frozen=True)
class _Own:
    """Axes that are no settings, in the form of settings."""

    start: str = text("", "start of every order, in place of the table's")
    end: str = text("", "end of every order, in place of the table's")
    volume: float = number(1.0, 0.01, 100.0, "multiplier of the others' volume")
    volatility: float = number(1.0, 0.01, 100.0, "multiplier of the daily volatility")
    reading: float = number(
        0.0,
        *_readings_range(),
        "imbalance at time zero of every symbol, + is more buyers, in place of the readings",
    )


@dataclass(frozen=True)
class Axis:
    """One axis: its rule, whether it is a world or a choice, and how its ranges are spaced."""

    rule: Field[Any]
    world: bool = False
    logarithmic: bool = False

    @property
    def name(self) -> str:
        return self.rule.name

    @property
    def numeric(self) -> bool:
        return "low" in self.rule.metadata


def _rule(section: type[Any], name: str) -> Field[Any]:
    return next(item for item in fields(section) if item.name == name)


AXES: dict[str, Axis] = {
    axis.name: axis
    for axis in (
        Axis(_rule(PlanSettings, "urgency"), logarithmic=True),
        Axis(_rule(PlanSettings, "risk_aversion"), logarithmic=True),
        Axis(_rule(PlanSettings, "max_participation")),
        Axis(_rule(_Own, "start")),
        Axis(_rule(_Own, "end")),
        Axis(_rule(PlanSettings, "bucket"), logarithmic=True),
        Axis(_rule(_Own, "volume"), world=True, logarithmic=True),
        Axis(_rule(_Own, "volatility"), world=True, logarithmic=True),
        Axis(_rule(_Own, "reading"), world=True),
        Axis(_rule(ModelSettings, "impact_law"), world=True),
        Axis(_rule(ModelSettings, "feedback"), world=True),
        Axis(_rule(ModelSettings, "relaxation"), world=True, logarithmic=True),
    )
}
"""Every axis by name; choices first."""


@dataclass(frozen=True)
class Grid:
    """A full Cartesian product; points are numbered from 1 with the last axis running fastest.

    Point 0 is the base: tables and settings as they are.
    """

    axes: dict[str, tuple[Value, ...]] = field(default_factory=dict)

    def __len__(self) -> int:
        return math.prod(map(len, self.axes.values()))

    @property
    def worlds(self) -> list[str]:
        """Its world axes."""
        return [name for name in self.axes if AXES[name].world]

    @property
    def choices(self) -> list[str]:
        """Its choice axes."""
        return [name for name in self.axes if not AXES[name].world]

    @property
    def aim(self) -> str | None:
        """Its axis along which a frontier runs, if it has one."""
        return next((name for name in AIMS if name in self.axes), None)

    def places(self, points: np.ndarray[Any, np.dtype[np.int64]]) -> dict[str, Any]:
        """Which value of each axis the points have, by axis; of points from 1 on."""
        shape = tuple(map(len, self.axes.values()))
        return dict(zip(self.axes, np.unravel_index(points - 1, shape), strict=True))

    def at(self, point: int) -> dict[str, Value]:
        """A point's values by axis; of the base, nothing."""
        if point == 0:
            return {}
        places = self.places(np.array([point]))
        return {name: values[int(places[name][0])] for name, values in self.axes.items()}

    def column(self, name: str, points: np.ndarray[Any, np.dtype[np.int64]]) -> np.ndarray:
        """The values of one axis at points; missing at the base."""
        numeric = AXES[name].numeric
        values = np.array(
            [np.nan if numeric else None, *self.axes[name]], dtype=float if numeric else object
        )
        places = self.places(np.maximum(points, 1))[name] + 1
        return values[np.where(points > 0, places, 0)]

    def check_size(self, orders: int) -> None:
        """Refuse a grid that is too large for so many orders; see `check_size`."""
        check_size({name: len(values) for name, values in self.axes.items()}, orders)


def check_size(shape: Mapping[str, int], orders: int = 1) -> None:
    """Refuse a grid of so many values by axis.

    Raises:
        MisuseError: more than `MOST` points times orders.
    """
    rows = math.prod(shape.values()) * orders
    if rows > MOST:
        product = " x ".join(f"{count:,} {name}" for name, count in shape.items())
        product += f" x {orders:,} orders" if orders > 1 else ""
        raise MisuseError(
            f"the grid has {rows:,} rows to solve ({product}), more than {MOST:,}; leave out "
            "values, axes or orders"
        )


def read_vary(texts: Iterable[str]) -> dict[str, str]:
    """`["urgency=0,0.1,1", ...]` by axis.

    Raises:
        InputError: no `=`, or an axis given twice.
    """
    found: dict[str, str] = {}
    problems = []
    for given in texts:
        name, equals, values = given.partition("=")
        name = name.strip().replace("-", "_")
        if not equals:
            problems.append(_problem(given, None, "has no values", "write AXIS=VALUE,VALUE,..."))
        elif name in found:
            problems.append(_problem(name, None, "is given twice", "put its values into one"))
        else:
            found[name] = values
    if problems:
        raise InputError(problems)
    return found


def read_grid(given: Mapping[str, Values]) -> Grid:
    """Check and complete a grid given by axis.

    Raises:
        InputError: every unknown or empty axis, every value out of its range or given twice, and
            axes that exclude each other. MisuseError: a grid that is too large.
    """
    if not isinstance(given, Mapping):
        raise MisuseError("grid must be a mapping of axes to values, as in {'urgency': [0, 0.1]}")
    problems: list[Problem] = []
    axes: dict[str, tuple[Value, ...]] = {}
    if not given:
        problems.append(_problem("grid", None, "varies nothing", f"axes: {', '.join(AXES)}"))
    items = {name: _items(values) for name, values in given.items()}
    check_size({name: sum(map(_count, values)) for name, values in items.items() if values})
    for name, values in items.items():
        if name not in AXES:
            near = get_close_matches(name, AXES, n=1)
            remedy = f"did you mean {near[0]!r}?" if near else f"axes: {', '.join(AXES)}"
            problems.append(_problem(name, None, "is no axis", remedy))
            continue
        axes[name], wrong = _values(AXES[name], values)
        problems += wrong
    if all(name in given for name in AIMS):
        problems.append(
            _problem(" and ".join(AIMS), None, "exclude each other", "vary one of them")
        )
    if problems:
        raise InputError(problems)
    return Grid(axes)


def _values(axis: Axis, items: list[Any]) -> tuple[tuple[Value, ...], list[Problem]]:
    """The values of one axis, and what is wrong with them."""
    found: dict[Value, None] = {}
    problems: list[Problem] = []
    for item in items:
        try:
            for value in _meant(axis, item):
                rule = broken_rule(axis.rule, value)
                if rule is None and value in found:
                    rule = "is given twice"
                if rule is not None:
                    raise CellError(rule, f"it is the {_doc(axis)}")
                found[value] = None
        except CellError as error:
            problems.append(_problem(axis.name, str(item), error.rule, error.remedy))
    if not found and not problems:
        problems.append(_problem(axis.name, None, "has no values", "give at least one"))
    return tuple(found), problems


def _items(given: Values) -> list[Any]:
    if isinstance(given, str):
        return [item.strip() for item in given.split(",")] if given.strip() else []
    if isinstance(given, (int, float)):
        return [given]
    return list(given)


def _meant(axis: Axis, item: Any) -> Iterator[Value]:
    """What one item of an axis stands for: a value, or the values of a range.

    Raises:
        CellError: it cannot be read.
    """
    if axis.name in TIMES:
        yield moment(str(item))
    elif not axis.numeric:
        yield item
    elif isinstance(item, str) and ":" in item:
        yield from _range(axis, item)
    else:
        yield _number(item)


def _number(item: Any) -> float:
    plain = isinstance(item, (str, int, float, np.number)) and not isinstance(item, bool)
    try:
        return float(item) if plain else math.nan
    except ValueError:
        return math.nan


def _count(item: Any) -> int:
    """How many values an item stands for, before it is read."""
    count = item.rpartition(":")[2] if isinstance(item, str) and item.count(":") == 2 else ""
    return int(count) if count.isdecimal() else 1


def _range(axis: Axis, item: str) -> Iterator[float]:
    """`first:last:count`, both ends included."""
    parts = item.split(":")
    try:
        first, last, count = float(parts[0]), float(parts[1]), int(parts[2])
    except (ValueError, IndexError):
        count = 0
    if len(parts) != 3 or count < 2 or not first < last:
        raise CellError(
            "is no range", "write first:last:count with first < last and a count of 2 or more"
        )
    if axis.logarithmic and first <= 0.0:
        raise CellError(
            "is even in the logarithm and so must begin above 0",
            f"give 0 as a value of its own, as in {axis.name}=0,0.01:{parts[1]}:{count}",
        )
    spaced = np.geomspace if axis.logarithmic else np.linspace
    yield from (float(f"{value:.12g}") for value in spaced(first, last, count))


def _doc(axis: Axis) -> str:
    return str(axis.rule.metadata["doc"]).partition(";")[0]


def _problem(axis: str, value: str | None, rule: str, remedy: str) -> Problem:
    source = axis if axis == "grid" else f"axis {axis}"
    return Problem(source, None, None, value, rule, remedy)
