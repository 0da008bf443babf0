"""The verb `review`: what came of a plan, split into its parts and held against the promise."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from importlib import import_module
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scheduler.balances import list_law
from scheduler.errors import MisuseError
from scheduler.figures import Figures
from scheduler.plan import Plan
from scheduler.shortfall.chance import both_sides
from scheduler.shortfall.columns import AS_PLANNED, labels, money, outcome, over, parts_of, prices
from scheduler.shortfall.context import fills_frame
from scheduler.shortfall.groups import groups_frame
from scheduler.shortfall.parts import PARTS
from scheduler.shortfall.taken import Taken, begins_later, take
from scheduler.summary import CAUTION
from scheduler.tables import bars as bars_table
from scheduler.tables import closes as closes_table
from scheduler.tables import fills as fills_table
from scheduler.tables.draft import Checked
from scheduler.tables.source import Source
from scheduler.tables.write import check_not_over, write_files
from scheduler.written import read_plan

FALSE_ALARMS = 0.05

_TABLES = ("shortfall", "groups", "fills")
_FILES = (
    *(f"{name}.{suffix}" for name in _TABLES for suffix in ("csv", "parquet")),
    "review.json",
    "review.html",
)


@dataclass(frozen=True)
class Review:
    """What came of a plan.

    orders : a row an order: prices, the parts of its shortfall, and its place in the promised law.
    groups : the same added up. fills : every fill with its context, which `calibrate` takes.
    summary : every figure, ready for JSON. notes : what the user should know.
    traded : the model's figures of what was traded.
    """

    plan: Plan = field(repr=False)
    orders: pd.DataFrame
    groups: pd.DataFrame
    fills: pd.DataFrame
    summary: dict[str, Any]
    notes: tuple[str, ...]
    traded: Figures = field(repr=False)

    def write(self, directory: str | Path, *, report: bool = False, parquet: bool = False) -> None:
        """Write tables, summary and, if asked for, the report page: all of them or nothing."""
        suffix = "parquet" if parquet else "csv"
        files: dict[str, Any] = {
            f"shortfall.{suffix}": self.orders,
            f"groups.{suffix}": self.groups,
            f"fills.{suffix}": self.fills,
            "review.json": self.summary,
        }
        if report:
            files["review.html"] = import_module("scheduler.report.review_page").page(self)
        check_not_over(self.summary["inputs"].values(), directory, (*files, *_FILES))
        write_files(directory, files, instead_of=_FILES)


def review(
    plan: Plan | str | Path,
    fills: Source,
    *,
    bars: Source | None = None,
    closes: Source | None = None,
    false_alarms: float = FALSE_ALARMS,
    ignore_columns: Iterable[str] = (),
) -> Review:
    """Review what came of a plan, after the close.

    Parameters
    ----------
    plan : a plan, or the directory that one was written to.
    fills : every fill of its orders. bars : of their symbols, for the market's prices
        while they traded. closes : what symbols stood at in the end; wins over the bars.
    false_alarms : chance that anything at all is flagged in a list with which nothing is wrong.

    Raises:
        InputError: everything wrong with the tables, at once; an order left undone without a price
            to value that at. MisuseError: false_alarms out of range.
    """
    if not 0.0 < false_alarms < 1.0:
        raise MisuseError(f"false_alarms must be above 0 and below 1, not {false_alarms:g}")
    names = ignore_columns if isinstance(ignore_columns, str) else tuple(ignore_columns)
    made = plan if isinstance(plan, Plan) else read_plan(plan, ignore_columns=names)
    checked = fills_table.ensure(fills, ignore_columns=names)
    given_bars = None if bars is None else bars_table.ensure(bars, ignore_columns=names)
    given_closes = None if closes is None else closes_table.ensure(closes, ignore_columns=names)
    taken = take(made, checked, given_bars, given_closes)
    parts = parts_of(taken)
    frame = pd.DataFrame(
        {
            **labels(taken),
            **prices(taken),
            **money(taken, parts, given_closes),
            **outcome(taken, parts, false_alarms),
        }
    )
    rows = taken.fills.frame.index.to_numpy()
    context = fills_frame(taken, checked.frame.loc[rows])
    groups = groups_frame(frame, context)
    tables = {"fills": checked, "bars": given_bars, "closes": given_closes}
    notes = _notes(taken, tables)
    summary = _summary(taken, frame, groups, tables, notes, false_alarms)
    return Review(made, frame, groups, context, summary, notes, taken.traded)


def _notes(taken: Taken, tables: dict[str, Checked | None]) -> tuple[str, ...]:
    notes = [note for table in tables.values() if table is not None for note in table.notes]
    notes += [*taken.laid.notes, *taken.market.notes]
    plan = taken.plan
    waits = begins_later(plan) & np.isnan(taken.market.at_zero)
    if waits.any():
        names = ", ".join(np.array(plan.book.names)[waits].tolist()[:10])
        notes.append(
            f"{names}: began after the plan was made, and no bars show the price then; what the "
            "market did in between counts as execution"
        )
    closes = tables["closes"]
    if closes is not None:
        others = sorted(set(closes.frame["symbol"]) - set(plan.book.rows["symbol"]))
        if others:
            notes.append(f"closes of symbols that the plan does not have: {', '.join(others[:10])}")
    if np.isnan(taken.dealt.market).any():
        notes.append(
            "where no bars show the market's price while an order traded, timing is not "
            "known and stands in the residual"
        )
    if taken.fills.frame["fee"].isna().any():
        notes.append("fills without a fee are charged as the market table says")
    return tuple(notes)


def _summary(
    taken: Taken,
    frame: pd.DataFrame,
    groups: pd.DataFrame,
    tables: dict[str, Checked | None],
    notes: tuple[str, ...],
    false_alarms: float,
) -> dict[str, Any]:
    plan = taken.plan
    read = {name: table.source for name, table in tables.items() if table is not None}
    rows = frame.astype(object).where(frame.notna(), None).to_dict("records")
    return {
        "schema": 1,
        "version": version("headrace"),
        "date": plan.summary["date"],
        "at": plan.summary["at"],
        "currency": plan.summary["currency"],
        "caution": CAUTION,
        "asked": {"false_alarms": false_alarms},
        "total": _total(taken, frame),
        "orders": {row.pop("order_id"): row for row in rows},
        "groups": groups.astype(object).where(groups.notna(), None).to_dict("records"),
        "inputs": {**plan.summary["inputs"], **read},
        "settings": plan.summary["settings"],
        "notes": list(notes),
    }


def _total(taken: Taken, frame: pd.DataFrame) -> dict[str, Any]:
    """The list's shortfall; its place in its law where that is known and all of it was traded."""
    sums = ("notional", "traded_value", *PARTS, "execution", "shortfall", "cost", "expected_cost")
    total: dict[str, Any] = {"orders": len(frame), "fills": len(taken.fills.frame)}
    total |= {name: float(frame[name].sum()) for name in sums}
    if frame["timing"].isna().all():
        total["timing"] = None
    total["shortfall_bps"] = 1e4 * total["shortfall"] / total["notional"]
    if "adjusted_shortfall" in frame:
        total["adjusted_shortfall"] = float(
            frame["adjusted_shortfall"].fillna(frame["shortfall"]).sum()
        )
    total["flagged"] = int(frame["flagged"].sum())
    plan = taken.plan
    if plan.transition is not None and (frame["held_against"] == AS_PLANNED).all():
        law = list_law(plan.transition, plan.figures.pooled)
        cost = np.array([total["cost"]])
        below = law.cdf(cost)
        total["cost_std"] = float(law.std[0])
        total["z"] = float(over(cost - law.mean, law.std)[0])
        total["quantile"] = float(below[0])
        total["chance"] = float(both_sides(below)[0])
    return total
