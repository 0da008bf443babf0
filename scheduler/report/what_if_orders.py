"""What the page of a grid shows of one order: its charts, tiles and tables."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import combinations
from typing import Any

import numpy as np
import pandas as pd

from scheduler.model.ragged import Array
from scheduler.report.chart import Chart
from scheduler.report.clock_axis import ClockAxis
from scheduler.report.details import money
from scheduler.report.markup import (
    MISSING,
    bare_table,
    bullets,
    card,
    number,
    percent,
    shares,
    tiles,
)
from scheduler.report.what_if_charts import frontier_chart, left_chart, regret_bars, regret_map
from scheduler.report.what_if_words import AXIS_WORDS, bps, point_text, value_text
from scheduler.scenarios import SOLVED, Frontier, Value
from scheduler.sessions import Grid as Buckets
from scheduler.what_if import WhatIf

_CURVES = 6  # as many as colours and dashes
_MAPS = 3
_SMALL = 8
_ROWS = 400
_WORST = 2  # worlds whose own best schedules are drawn


class OrderScenarios:
    """One order of a grid."""

    def __init__(self, result: WhatIf, order: int) -> None:
        self.result, self.order = result, order
        self.name = result.book.names[order]
        self.rows = result.table.at("order_id", self.name)
        self.base = self.rows[self.rows["point"] == 0].iloc[0]
        self.near = result.near_base[self.name]

    @property
    def title(self) -> str:
        row = self.result.book.rows.iloc[self.order]
        side = "buy" if row["side"] > 0 else "sell"
        return f"{self.name}: {side} {shares(row['quantity'])} {row['symbol']}"

    @property
    def lines(self) -> list[Frontier]:
        """Its frontiers, those near the base first."""
        mine = [line for line in self.result.frontiers if line.order_id == self.name]
        return sorted(mine, key=lambda line: line.away(self.near))

    def charts(self) -> Iterator[Chart]:
        """The large ones."""
        yield from self.frontier()
        yield from self.regret()

    def frontier(self) -> Iterator[Chart]:
        """Its frontiers in one chart, if it has any."""
        if self.lines:
            drawn = self.lines[:_CURVES]
            yield frontier_chart(drawn, (self.base["cost_std_bps"], self.base["expected_cost_bps"]))

    def regret(self) -> Iterator[Chart]:
        """Regret along the only world axis, or over pairs of them."""
        worlds = self.result.grid.worlds
        if len(worlds) == 1:
            regret = self._regret(worlds)
            yield regret_bars((worlds[0], self._values(worlds[0])), regret, self._fixed(worlds))
        for pair in list(combinations(worlds, 2))[:_MAPS]:
            x, y = ((name, self._values(name)) for name in pair)
            yield regret_map(x, y, self._regret(pair).T, self._fixed(pair))

    def _values(self, name: str) -> tuple[Value, ...]:
        values = self.result.grid.axes[name]
        return values if isinstance(values[0], str) else tuple(sorted(values))

    def _regret(self, names: Any) -> Array:
        """Regret over some axes, the others as near to the base as the grid has them."""
        frame = self._where({n: v for n, v in self.near.items() if n not in names})
        places = [
            frame[name].map({value: at for at, value in enumerate(self._values(name))})
            for name in names
        ]
        regret = np.full([len(self._values(name)) for name in names], np.nan)
        regret[tuple(place.to_numpy(dtype=int) for place in places)] = frame["regret_bps"]
        return regret

    def _fixed(self, names: Any) -> str:
        others = {n: v for n, v in self.near.items() if n not in names}
        return f" Here {point_text(others)}." if others else ""

    def _where(self, values: dict[str, Value]) -> pd.DataFrame:
        """Its rows on the grid with these values."""
        frame = self.rows[self.rows["point"] > 0]
        for name, value in values.items():
            frame = frame[frame[name] == value]
        return frame

    def _worlds(self) -> pd.DataFrame:
        """Its rows at choices near the base's in every world, those of most regret first."""
        found = self._where({name: self.near[name] for name in self.result.grid.choices})
        return found[found["regret_bps"].notna()].sort_values(
            "regret_bps", ascending=False, kind="stable"
        )

    def small(self) -> Iterator[Chart]:
        """Schedules at a few points, the base's behind them."""
        known = self.result.study.shares(0, self.order)
        assert known is not None
        buckets, base = known
        yield self._left("the base", buckets, base, None, self.base)
        for point, why in list(self._points().items())[: _SMALL - 1]:
            found = self.result.study.shares(point, self.order)
            row = self.rows[self.rows["point"] == point].iloc[0]
            if found is not None:
                behind = base if found[0] is buckets else None
                values = {n: v for n, v in self.result.grid.at(point).items() if v != self.near[n]}
                title = point_text(values) if values else "nearest to the base"
                yield self._left(f"{title} ({why})" if why else title, *found, behind, row)

    def _left(
        self, title: str, buckets: Buckets, slices: Array, behind: Array | None, row: Any
    ) -> Chart:
        quantity = self.result.book.arrays.quantity[self.order]
        paths = [
            None if values is None else (100.0 * (1.0 - np.cumsum(values) / quantity)).tolist()
            for values in (slices, behind)
        ]
        below = f"cost {bps(row['expected_cost_bps'])} bps, risk {bps(row['cost_std_bps'])} bps"
        assert paths[0] is not None
        return left_chart(title, ClockAxis.of(buckets), paths[0], paths[1], below)

    def _points(self) -> dict[int, str]:
        """Points worth drawing, and why: the knee, the ends of each axis, the worst worlds."""
        found: dict[int, str] = {}
        solved = self.rows[self.rows["status"].isin(SOLVED) & (self.rows["point"] > 0)]
        near = self.lines[0] if self.lines and self.lines[0].away(self.near) == 0 else None
        if near is not None and near.knee is not None:
            row = self.rows.loc[near.rows[near.knee]]
            found[int(row["point"])] = "the knee"
        worst = self._worlds()
        for point in worst[worst["regret_bps"] > 0.0].head(_WORST)["point"].tolist():
            found.setdefault(int(point), "most regret")
        for name in self.result.grid.axes:
            along = self._where({n: v for n, v in self.near.items() if n != name})
            along = along[along["point"].isin(solved["point"])].sort_values(name)
            for point in along["point"].iloc[[0, -1]].tolist() if len(along) else ():
                found.setdefault(int(point), "")
        return found

    def tiles(self) -> str:
        """The base, and what the grid says of it, in figures."""
        ccy, near = self.result.book.currency, self.lines[0] if self.lines else None
        notional = float(self.result.book.arrays.market.price[self.order]) * float(
            self.result.book.arrays.quantity[self.order]
        )
        pairs = [
            (
                "To trade",
                shares(self.result.book.arrays.quantity[self.order]),
                money(notional, ccy),
            ),
            (
                "Cost of the base",
                f"{bps(self.base['expected_cost_bps'])} bps",
                money(self.base["expected_cost"], ccy),
            ),
            (
                "Its risk (1 st. dev.)",
                f"{bps(self.base['cost_std_bps'])} bps",
                money(self.base["cost_std"], ccy),
            ),
        ]
        if near is not None and near.knee is not None and self.result.grid.aim:
            word = AXIS_WORDS[self.result.grid.aim]
            below = f"cost {bps(near.cost[near.knee])}, risk {bps(near.risk[near.knee])} bps"
            pairs.append((f"Knee at {word}", value_text(float(near.aim[near.knee])), below))
        for row in self._worlds().head(1).to_dict("records"):
            where = {name: row[name] for name in self.result.grid.worlds}
            pairs.append(("Most regret", f"{bps(row['regret_bps'])} bps", point_text(where)))
        good = self.rows["status"].isin(SOLVED)
        pairs.append(
            (
                "Points with a schedule",
                f"{int(good.sum()):,}",
                f"{percent(float(good.mean()), 0)} of all",
            )
        )
        return tiles(pairs)

    def cards(self) -> str:
        """The knees in words, and the order's rows."""
        made = []
        if self.lines:
            words = [
                f"{point_text(line.values)}: {line.words}" if line.values else line.words
                for line in self.lines[:_CURVES]
            ]
            price = "Each bp of risk shed costs, at the knee itself, about the urgency there."
            made.append(card("What do the knees say?", bullets([*words, price]), wide=True))
        return "".join(made)

    def table(self) -> str:
        """Its rows, the first of them where there are very many."""
        axes = list(self.result.grid.axes)
        header = ["point", *(AXIS_WORDS[name] for name in axes), "cost, bps", "risk, bps"]
        header += ["half done", "last trade", "regret, bps", "base’s shares forbidden", "optimum"]
        shown = self.rows.head(_ROWS)
        cells = [
            [
                "base" if row["point"] == 0 else str(row["point"]),
                *("" if row["point"] == 0 else value_text(row[name]) for name in axes),
                *(bps(row[name]) for name in ("expected_cost_bps", "cost_std_bps")),
                *(_clock(row[name]) for name in ("half_done", "last_trade")),
                bps(row["regret_bps"]),
                number(row["excess_shares"]),
                f"{row['status']}, knee" if row["knee"] else str(row["status"]),
            ]
            for row in shown.to_dict("records")
        ]
        return bare_table(header, cells)

    def overview(self) -> dict[str, str]:
        """The order in a line: base, knee near the base, the worst world."""
        line = {
            "order": self.title,
            "cost of the base, bps": bps(self.base["expected_cost_bps"]),
            "its risk, bps": bps(self.base["cost_std_bps"]),
        }
        if aim := self.result.grid.aim:
            knee: list[Any] = [None, None, None]
            if self.lines and (k := self.lines[0].knee) is not None:
                knee = [
                    float(values[k])
                    for values in (self.lines[0].aim, self.lines[0].risk, self.lines[0].cost)
                ]
            line |= {
                f"knee at {AXIS_WORDS[aim]}": MISSING if knee[0] is None else value_text(knee[0]),
                "cost there, bps": bps(knee[2]),
                "risk there, bps": bps(knee[1]),
            }
        if self.result.grid.worlds:
            worst = self._worlds().head(1).to_dict("records")
            row = worst[0] if worst else {}
            where = {name: row[name] for name in self.result.grid.worlds if row}
            line |= {
                "most regret, bps": bps(row.get("regret_bps")),
                "where": point_text(where) if row else MISSING,
            }
        return line


def _clock(text: Any) -> str:
    return text[5:16].replace("T", " ") if isinstance(text, str) else ""
