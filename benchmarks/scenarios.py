"""A grid of what-if as one call, beside its points solved one by one in the same run."""

from __future__ import annotations

import time

import numpy as np
import pandas as pd

from benchmarks.timing import milliseconds, table
from scheduler.figures import Charges, Figures
from scheduler.settings import Settings
from scheduler.solve.schedule import schedule
from scheduler.what_if import WhatIf, what_if

_ORDERS, _SAMPLE = 50, 300
_GRIDS = (
    ("200 urgencies", {"urgency": "0.01:10:200"}),
    ("20 urgencies, 10 volumes", {"urgency": "0.01:10:20", "volume": "0.5:2:10"}),
)


def run() -> None:
    rows = []
    for label, grid in _GRIDS:
        clock = time.perf_counter()
        result = _command(grid)
        seconds = time.perf_counter() - clock
        count = len(result.scenarios)
        each, worst = _one_by_one(result)
        rows.append(
            (
                f"{label}, {_ORDERS} orders x 78",
                f"{count:,}",
                milliseconds(seconds),
                milliseconds(seconds / count),
                milliseconds(each),
                f"{each * count / seconds:.1f}",
                f"{worst:.0e}",
            )
        )
    header = (
        *("grid", "rows", "time, all told", "a row", "a row solved alone"),
        *("ratio", "largest difference of the objective"),
    )
    print(
        table(
            f"What-if: reading, stacked solves, warm starts along the urgency, regret, figures and "
            f"knees, against single solves alone ({_SAMPLE} of the rows, scaled up):",
            header,
            rows,
        )
    )


def _command(grid: dict[str, str]) -> WhatIf:
    """Fifty orders in buckets of 5 minutes."""
    orders, market = tables_of(_ORDERS)
    settings = Settings().with_values("plan", bucket=5.0)
    return what_if(orders, market, grid=grid, settings=settings, date="2026-03-05", at="09:30")


def tables_of(count: int) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Orders of 1 % to 6 % of a flat day, and their market."""
    rng = np.random.default_rng(1)
    symbols = [f"S{i:02d}" for i in range(count)]
    adv = 10.0 ** rng.uniform(5.5, 7.0, count)
    orders = pd.DataFrame(
        {
            "order_id": symbols,
            "symbol": symbols,
            "side": rng.choice(["buy", "sell"], count),
            "quantity": np.floor(rng.uniform(0.01, 0.06, count) * adv),
        }
    )
    market = pd.DataFrame(
        {
            "symbol": symbols,
            "price": rng.uniform(10.0, 200.0, count).round(2),
            "adv": adv.round(),
            "daily_vol": rng.uniform(0.01, 0.04, count).round(4),
            "calendar": "XNYS",
            "profile": "flat",
        }
    )
    return orders, market


def _one_by_one(result: WhatIf) -> tuple[float, float]:
    """Seconds a single solve, and how far objectives of the grid are from it, relatively."""
    frame, study = result.scenarios, result.study
    chosen = frame[frame["status"] == "proven"].sample(_SAMPLE, random_state=2)
    seconds, worst = 0.0, 0.0
    for row in chosen.to_dict("records"):
        known = study.alone(row["point"], result.book.names.index(row["order_id"]))
        assert known is not None
        _, order = known
        clock = time.perf_counter()
        found = schedule(order, certify=False)
        seconds += time.perf_counter() - clock
        none = np.zeros(order.stages.layout.entries)
        value = Figures(order, Charges(none, none), found.shares).objective[0]
        worst = max(worst, abs(float(value) / row["objective"] - 1.0))
    return seconds / _SAMPLE, worst
