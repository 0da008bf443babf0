"""What the charts of a list draw, from its balances and its summary."""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property
from html import escape
from typing import Any, TypeAlias

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.balances import list_law
from scheduler.model.ragged import Array
from scheduler.plan import Plan
from scheduler.report.clock_axis import ClockAxis
from scheduler.report.density import density_of
from scheduler.report.lines import axis_data
from scheduler.report.list_axis import list_axis
from scheduler.report.markup import number
from scheduler.report.palette import AT_CAP, FREE, SERIES
from scheduler.transition import measure_weights

_FACTORS_DRAWN = 8  # in the split of the risk; the others are summed up
_BINDS = 1e-6  # of the list's value: as near as a solver brings a level to its limit
_MARGIN = 0.1

_Line: TypeAlias = tuple[list[float], list[float]]


class ListLines:
    """Values of a list's charts; lines have a point at time zero and after each interval."""

    def __init__(self, plan: Plan) -> None:
        assert plan.transition is not None
        assert plan.balances is not None
        self.plan, self.transition = plan, plan.transition
        self.balances: pd.DataFrame = plan.balances
        self.gross = float(plan.figures.notional.sum())

    @cached_property
    def axis(self) -> ClockAxis:
        return list_axis(self.transition)

    @cached_property
    def axis_values(self) -> dict[str, Any]:
        """What all charts over time share."""
        currency = self.plan.summary["currency"]
        return axis_data(self.axis) | {"money_title": escape(currency) or "value"}

    def _path(self, initial: float, values: Any) -> list[Any]:
        return self.axis.path(initial, np.asarray(values, dtype=float).tolist())

    def column(self, name: str) -> Array:
        return self.balances[name].to_numpy(dtype=float)

    def sides(self) -> dict[str, Any]:
        value = self.transition.value
        found: dict[str, Any] = {}
        for name, total in (
            ("bought", float(np.maximum(value, 0.0).sum())),
            ("sold", float(np.maximum(-value, 0.0).sum())),
        ):
            money = self.column(name)
            found[name] = self._path(0.0, 100.0 * money / (total or 1.0))
            found[f"{name}_money"] = self._path(0.0, money)
            found[f"has_{name}"] = total > 0.0
        return found

    def left(self) -> dict[str, Any]:
        return {
            "gross": self._path(self.gross, self.column("gross")),
            "net": self._path(float(self.transition.value.sum()), self.column("net")),
        }

    @cached_property
    def currency_groups(self) -> dict[str, NDArray[np.bool_]]:
        """Orders by currency, the largest first; beyond what can be told apart all in one."""
        book = self.transition.book
        code = book.rows["currency"].fillna(book.currency).to_numpy()
        size = np.abs(self.transition.value)
        largest = sorted(set(code), key=lambda name: (-size[code == name].sum(), name))
        if len(largest) <= len(SERIES):
            return {name: code == name for name in largest}
        named = largest[: len(SERIES) - 1]
        rest = f"{len(largest) - len(named)} others"
        return {name: code == name for name in named} | {rest: ~np.isin(code, named)}

    def currencies(self) -> dict[str, Any]:
        done = 1.0 - self.transition.left(self.plan.figures.pooled.shares)
        value, found = self.transition.value, dict[str, Any]()
        for at, (name, mine) in enumerate(self.currency_groups.items()):
            size = np.abs(value[mine])
            found[f"name{at}"] = escape(name)
            found[f"done{at}"] = self._path(0.0, 100.0 * (size @ done[mine]) / size.sum())
            found[f"cash{at}"] = self._path(0.0, value[mine] @ done[mine])
        return found

    @cached_property
    def factors(self) -> dict[str, float]:
        """Parts of the variance by factor, the largest first."""
        parts: dict[str, float] = self.plan.summary["total"]["risk_split"]["by_factor"]
        return dict(sorted(parts.items(), key=lambda item: -item[1]))

    def exposures(self) -> dict[str, Any]:
        found: dict[str, Any] = {}
        for at, name in enumerate(list(self.factors)[: len(SERIES)]):
            column = f"factor:{name}"
            found[f"name{at}"] = escape(name)
            found[f"exposure{at}"] = self._path(self._at_zero(column), self.column(column))
        return found

    def _at_zero(self, measure: str) -> float:
        """A measure before anything is traded."""
        kind, _, name = measure.partition(":")
        if kind == "cash":
            return 0.0
        t = self.transition
        return float(measure_weights(t.book, t.risk, kind, name).sum())

    def risk(self) -> dict[str, Any]:
        """Bars from the top: parts that add up, then the named factors."""
        split = self.plan.summary["total"]["risk_split"]
        rows = [
            ("names alone", split["specific"], FREE),
            ("own trading", split["own_imbalance"], FREE),
            ("all factors", split["factors"], FREE),
        ]
        named = list(self.factors.items())
        rows += [(name, part, AT_CAP) for name, part in named[:_FACTORS_DRAWN]]
        if rest := named[_FACTORS_DRAWN:]:
            rows.append((f"{len(rest)} other factors", sum(part for _, part in rest), AT_CAP))
        part = [100.0 * value for _, value, _ in rows]
        return {
            "part": part,
            "part_at": list(range(len(rows))),
            "part_name": [escape(name) for name, _, _ in rows],
            "part_text": [f"{number(value, 1)} %" for value in part],
            "part_hatch": [hatch for _, _, hatch in rows],
            "part_range": [1.25 * min(0.0, *part), 1.15 * max(part)],
            "part_rows": [len(rows) - 0.4, -0.6],
        }

    def cost(self) -> dict[str, Any] | None:
        return density_of(list_law(self.transition, self.plan.figures.pooled), self.gross)

    def bounds(self, measure: str) -> tuple[Array, Array]:
        """(T,) limits of a corridor, nan where there is none."""
        return self.column(f"{measure}_lower"), self.column(f"{measure}_upper")

    def touching(self, measure: str) -> NDArray[np.bool_]:
        """(T,) times at which a level is at a limit, to within whole lots."""
        book = self.plan.book
        lots = float(np.linalg.norm(book.lot * book.arrays.market.price))
        level, near = self.column(measure), lots + _BINDS * self.gross
        lower, upper = self.bounds(measure)
        result: NDArray[np.bool_] = (level <= lower + near) | (level >= upper - near)
        return result

    def corridor(self, measure: str) -> dict[str, Any]:
        level, (lower, upper) = self.column(measure), self.bounds(measure)
        initial, touch = self._at_zero(measure), self.touching(measure)
        bottom, top = _roomy(initial, level, lower, upper)
        above, below = self._steps(upper, max), self._steps(lower, min)
        return {
            "level": self._path(initial, level),
            **_ground("above", above, top),
            **_ground("below", below, bottom),
            **_lines([*above, *below]),
            "touch_x": self.axis.right[touch].tolist(),
            "touch_y": level[touch].tolist(),
            "has_touch": bool(touch.any()),
            "level_range": [bottom, top],
        }

    def _steps(self, bound: Array, looser: Callable[[float, float], float]) -> list[_Line]:
        """A limit as lines of steps, one for each run of intervals at whose ends it holds.

        Between two ends stands the looser of their limits.
        """
        runs: list[_Line] = []
        given, ends = np.isfinite(bound), self.axis.right.tolist()
        for at in np.flatnonzero(given).tolist():
            end, limit = ends[at], float(bound[at])
            if at == 0 or not given[at - 1]:
                alone = at + 1 == len(given) or not given[at + 1]
                runs.append(([float(self.axis.left[at])], [limit]) if alone else ([], []))
            else:
                between = looser(float(bound[at - 1]), limit)
                runs[-1][0].extend((ends[at - 1], end))
                runs[-1][1].extend((between, between))
            runs[-1][0].append(end)
            runs[-1][1].append(limit)
        return runs


def _roomy(initial: float, *values: Array) -> tuple[float, float]:
    every = np.concatenate(([initial], *values))
    low, high = float(np.nanmin(every)), float(np.nanmax(every))
    margin = _MARGIN * (high - low) or 1.0
    return low - margin, high + margin


def _ground(side: str, runs: list[_Line], edge: float) -> dict[str, list[float | None]]:
    """Outlines of the ground between a limit and the edge of the chart."""
    xs: list[float | None] = []
    ys: list[float | None] = []
    for x, y in runs:
        xs += [*x, x[-1], x[0], None]
        ys += [*y, edge, edge, None]
    return {f"{side}_x": xs[:-1], f"{side}_y": ys[:-1]}


def _lines(runs: list[_Line]) -> dict[str, list[float | None]]:
    xs: list[float | None] = []
    ys: list[float | None] = []
    for x, y in runs:
        xs += [*x, None]
        ys += [*y, None]
    return {"limit_x": xs[:-1], "limit_y": ys[:-1]}


def corridor_words(measure: str) -> str:
    """What a corridor is on, in words."""
    kind, _, name = measure.partition(":")
    return {
        "cash": "cash",
        "gross": "what is still to trade",
        "net": "the net still to trade",
        "factor": f"the exposure to {name}",
        "group": f"the net of {name}",
    }[kind]
