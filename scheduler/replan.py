"""The verb `replan`: a plan and the fills so far in, the schedule of the rest out, and why."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from importlib import import_module
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scheduler.constraints import check_solver
from scheduler.errors import InputError, MisuseError
from scheduler.intake import Finish
from scheduler.intake.clocks import Clocks
from scheduler.plan import AIMS, FILES, Plan, asked_finish, check_aim
from scheduler.rest.attribution import NOW, PLAN, Change, explained
from scheduler.rest.fills import Fills, notes_on_hours, place_fills
from scheduler.rest.remaining import dated, joined_rows, newer
from scheduler.rest.solved import Given, Origin, Rest, origin_of
from scheduler.rest.standing import progress_frame
from scheduler.rest.volume import Volume, volume_so_far
from scheduler.sessions import resolve
from scheduler.settings import Settings
from scheduler.summary import CAUTION
from scheduler.tables.cross import check_together
from scheduler.tables.cross_list import check_list
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs, read_each
from scheduler.tables.source import Source
from scheduler.tables.write import check_not_over, write_files
from scheduler.written import read_plan

_FILES = ("replan.json", "progress.csv", "attribution.csv", "replan.html")


@dataclass(frozen=True)
class Replan:
    """The rest of a plan.

    plan : of what is left to trade; None where nothing can be traded any more.
    progress : a row an order: planned so far, done, the band that chance explains, whole cost.
    attribution : a row an order and change, from `as planned` to `now`; they add up.
    summary : every figure, ready for JSON. origin : the plan it is the rest of.
    """

    plan: Plan | None
    progress: pd.DataFrame
    attribution: pd.DataFrame
    summary: dict[str, Any]
    notes: tuple[str, ...]
    origin: Plan = field(repr=False)
    fills: pd.DataFrame = field(repr=False)

    def write(self, directory: str | Path, *, report: bool = False) -> None:
        """Write the rest's schedule and summary, progress and attribution: all or nothing.

        With `report`, also `replan.html`, and `report.html` of the rest.
        """
        files: dict[str, Any] = {} if self.plan is None else self.plan.files(report=report)
        files |= {
            "replan.json": self.summary,
            "progress.csv": self.progress,
            "attribution.csv": self.attribution,
        }
        if report:
            files["replan.html"] = import_module("scheduler.report.replan_page").page(self)
        names = (*files, *FILES, *_FILES)
        check_not_over(self.summary["inputs"].values(), directory, names)
        write_files(directory, files, instead_of=(*FILES, *_FILES))


def replan(
    plan: Plan | str | Path,
    fills: Source | None,
    *,
    at: str | None = None,
    orders: Source | None = None,
    market: Source | None = None,
    profiles: Source | None = None,
    readings: Source | None = None,
    exposures: Source | None = None,
    factor_covariance: Source | None = None,
    returns: Source | None = None,
    corridors: Source | None = None,
    constraints: Source | None = None,
    bars: Source | None = None,
    settings: Settings | None = None,
    finish: str | Finish | Iterable[str | Finish] = (),
    soften: bool = False,
    ignore_columns: Iterable[str] = (),
) -> Replan:
    """Plan the rest of a plan anew.

    With nothing given but fills as planned, the rest of the plan is reproduced: it is solved at the
    plan's implied risk aversion, with its own outstanding imbalance carried over.

    Parameters
    ----------
    plan : a `Plan`, or the directory one was written to. fills : what has traded; None: nothing.
    at : the present (default: now).
    orders : all orders as they now are, in full quantity: one left out is cancelled.
    market, readings : newer rows, which replace the plan's of the same symbols.
    profiles, exposures, factor_covariance, returns, corridors, constraints : in place of those
        of the plan.
    bars : intraday bars of today, for the volume so far.
    settings, finish : in place of the plan's; another aim replaces its risk aversion.
    soften : as in `plan`.

    Raises:
        InputError: tables that are wrong, fills that cannot be, more filled than asked for.
        InfeasibleError, NotConvergedError: as `plan` does, of the rest.
        MisuseError: a time before the plan's; a plan without its tables.
    """
    first = plan if isinstance(plan, Plan) else read_plan(plan, ignore_columns=ignore_columns)
    if first.inputs is None:
        raise MisuseError(
            "this plan is itself a re-plan, or was not made from tables; give the first plan, and "
            "all fills since then"
        )
    tables = {
        "fills": fills,
        "orders": orders,
        "market": market,
        "profiles": profiles,
        "readings": readings,
        "exposures": exposures,
        "factor_covariance": factor_covariance,
        "returns": returns,
        "corridors": corridors,
        "constraints": constraints,
        "bars": bars,
    }
    asked = first.book.settings if settings is None else settings
    check_aim(asked)
    new, problems = read_each(tables, ignore_columns=ignore_columns, settings=asked)
    if problems:
        raise InputError(problems)
    _check_constraints(first.inputs, new, asked)
    begun = origin_of(first, _present(first, at), soften=soften)
    every = _every_order(first.inputs, new)
    placed = place_fills(new.get("fills"), every, day=begun.day, since=_since(begun), at=begun.at)
    _check_auctions(begun, placed)
    changes, notes = _changes(begun, new, placed, asked, finish)
    _check_final(changes[-1].given)
    names = _names(first, changes[-1].given)
    rest, table = explained(begun, changes, names)
    strays = notes_on_hours(placed, first.book)
    sources = _sources(first, new)
    return _result(begun, changes[-1].given, rest, table, (*strays, *notes, *rest.notes), sources)


def _check_constraints(first: Inputs, new: Mapping[str, Checked], settings: Settings) -> None:
    if "constraints" in new:
        check_solver(settings)
    if first.constraints is not None and "constraints" not in new:
        raise MisuseError(
            "the plan keeps constraints, which speak of its numbered buckets; give constraints for "
            "the buckets of the rest"
        )


def _present(plan: Plan, at: str | None) -> pd.Timestamp:
    """The instant of the re-plan, not before the plan's own."""
    book = plan.book
    if at is None:
        now = pd.Timestamp.now(tz="UTC").as_unit("ns")
    elif isinstance(at, str):
        now = resolve(at, date=book.date, calendar=str(book.rows["calendar"].iat[0]))
    else:
        raise MisuseError(f"at must be text such as 11:30 or 2026-03-05T11:30, not {at!r}")
    begun = min(pd.Timestamp(grid.time_zero, tz="UTC") for grid in book.grids)
    begun = begun if book.at is None else min(begun, book.at)
    if now < begun:
        raise MisuseError(
            f"{now.isoformat()} is before the plan's own time, {begun.isoformat()}; give a later at"
        )
    return now


def _every_order(first: Inputs, new: Mapping[str, Checked]) -> pd.DataFrame:
    """The orders of the plan and those given, each once, with their market row.

    Raises:
        InputError: an order that has become another: of another symbol or side.
    """
    if "orders" not in new:
        return joined_rows(first)
    old, orders = first.orders.frame, new["orders"]
    before = old.set_index("order_id").reindex(orders.frame["order_id"])
    problems = []
    for column in ("symbol", "side"):
        was = before[column].to_numpy()
        other = pd.notna(was) & (was != orders.frame[column].to_numpy())
        rule = f"is not the {column} that the order has in the plan"
        problems += orders.problems(
            other, column, rule, "give the new order an order_id of its own"
        )
    if problems:
        raise InputError(problems)
    market = newer(first.market, new.get("market"))
    assert market is not None
    now = joined_rows(replace(first, orders=orders, market=market))
    return pd.concat([joined_rows(first), now], ignore_index=True).drop_duplicates("order_id")


def _check_auctions(origin: Origin, fills: Fills) -> None:
    """Refuse fills of an auction at the very instant of the re-plan, which has it still to come."""
    now = origin.at.tz_localize(None).to_datetime64()
    for symbol in fills.frame.loc[fills.frame["instant"] == origin.at.value, "symbol"]:
        grid = origin.grids.get(symbol)
        if grid is not None and bool((grid.auction & (grid.end == now)).any()):
            raise MisuseError(
                f"{symbol} has fills of the auction at {origin.at.isoformat()}, the instant at "
                "which the rest is planned with that auction to come; plan it a second later"
            )


class _Since(dict[str, int]):
    """By order_id, ns UTC; what is not in the plan began with it at the earliest."""

    def __missing__(self, key: str) -> int:
        return min(self.values())


def _since(origin: Origin) -> dict[str, int]:
    rows = origin.plan.book.rows
    pairs = zip(rows["order_id"], rows["symbol"], strict=True)
    return _Since({name: origin.zeros[symbol].value for name, symbol in pairs})


def _changes(
    origin: Origin,
    new: Mapping[str, Checked],
    fills: Fills,
    settings: Settings,
    finish: str | Finish | Iterable[str | Finish],
) -> tuple[list[Change], tuple[str, ...]]:
    """Fills, readings, volume so far, market, orders and limits, settings: what is new of them."""
    first, plan = origin.plan.inputs, origin.plan
    assert first is not None
    begun = {symbol: zero for symbol, zero in origin.zeros.items() if zero <= origin.at}
    inputs = replace(first, readings=dated(first.readings, begun), constraints=None)
    given = Given(inputs, plan.book.settings, plan.finish, fills)
    changes = [Change("fills", given)]

    def add(name: str, **values: Any) -> None:
        changes.append(Change(name, replace(changes[-1].given, **values)))

    def tables(*names: str) -> dict[str, Any]:
        return {name: new[name] for name in names if name in new}

    if "readings" in new:
        merged = newer(inputs.readings, new["readings"])
        add("readings", inputs=replace(inputs, readings=merged))
    volume = Volume({}, {}, ())
    if "bars" in new:
        volume = _volume(origin, new["bars"], given)
        add("volume so far", came=volume.came, ahead=volume.ahead)
    risk = tables("profiles", "exposures", "factor_covariance", "returns")
    if "market" in new or risk:
        merged = newer(first.market, new.get("market")) or first.market
        priced = frozenset(new["market"].frame["symbol"]) if "market" in new else frozenset()
        later = replace(changes[-1].given.inputs, market=merged, **risk)
        add("market", inputs=later, priced=priced)
    limits = tables("orders", "corridors", "constraints")
    if limits:
        add("orders and limits", inputs=replace(changes[-1].given.inputs, **limits))
    aims = [(getattr(settings.plan, aim), getattr(plan.book.settings.plan, aim)) for aim in AIMS]
    done_by = asked_finish(finish, settings)
    if settings != plan.book.settings or done_by != plan.finish:
        own_aim = any(now != before for now, before in aims)
        add("settings", settings=settings, finish=done_by, own_aim=own_aim)
    return changes, volume.notes


def _volume(origin: Origin, bars: Checked, given: Given) -> Volume:
    rows = joined_rows(given.inputs)
    day, at = origin.day, origin.at
    clocks = Clocks(rows, given.inputs, given.settings, day, at.isoformat(), at)
    return volume_so_far(bars, rows, clocks, given.fills, origin.grids, day=day, at=at)


def _check_final(given: Given) -> None:
    """Whether all tables still fit together."""
    inputs = given.inputs
    tables = {name: table for name, table in vars(inputs).items() if isinstance(table, Checked)}
    if inputs.returns is not None and inputs.exposures is not None:
        both = "give either exposures with factor_covariance, or returns"
        raise MisuseError(f"the plan's risk and the new tables' are of two kinds; {both}")
    problems, _ = check_together(
        inputs.orders, inputs.market, inputs.profiles, inputs.readings, given.settings
    )
    problems += check_list(tables, frozenset())
    if problems:
        raise InputError(problems)


def _names(plan: Plan, given: Given) -> list[str]:
    """Every order: the plan's, then those added."""
    return list(dict.fromkeys([*plan.book.names, *given.inputs.orders.frame["order_id"]]))


def _sources(plan: Plan, tables: Mapping[str, Checked]) -> dict[str, str]:
    """Where everything came from, by what it is."""
    found = {f"plan_{name}": path for name, path in plan.book.inputs.items()}
    if plan.read_from is not None:
        summary = str(Path(plan.read_from) / "summary.json")
        found |= {"plan": plan.read_from, "plan_summary": summary}
    return found | {name: table.source for name, table in tables.items()}


def _result(
    origin: Origin,
    given: Given,
    rest: Rest,
    table: pd.DataFrame,
    notes: tuple[str, ...],
    sources: dict[str, str],
) -> Replan:
    progress = progress_frame(origin, given, rest, table)
    notional = progress.set_index("order_id")["notional"]
    table = table.assign(bps=1e4 * table["expected_cost"] / table["order_id"].map(notional))
    cancelled = progress.loc[progress["state"] == "cancelled", "order_id"]
    notes = (*notes, *(f"{name}: not among the orders any more: cancelled" for name in cancelled))
    if rest.plan is not None and not set(rest.plan.book.rows["symbol"]) <= given.priced:
        notes += (
            "the present price of symbols without a new market row is taken as the plan's, moved "
            "by our own trading in the model",
        )
    plan = rest.plan
    first = origin.plan.summary
    if "worst_of" in first["total"]:
        notes += ("the plan is of least worst regret; its rest is the best under its own law",)
    summary = {
        "schema": 1,
        "version": version("headrace"),
        "date": first["date"],
        "at": origin.at.isoformat(),
        "planned_at": first["at"],
        "currency": first["currency"],
        "caution": CAUTION,
        "total": _total(progress, table),
        "orders": _by_order(progress, table),
        "inputs": sources,
        "notes": list(notes),
    }
    if plan is not None:
        told = {"plan": sources.get("plan"), "planned_at": first["at"]}
        plan = replace(plan, summary={**plan.summary, "replanned": told})
    return Replan(plan, progress, table, summary, notes, origin.plan, given.fills.frame)


def _by_order(progress: pd.DataFrame, table: pd.DataFrame) -> dict[str, dict[str, Any]]:
    """Each order's row of the progress table, and what changes it."""
    rows: dict[str, dict[str, Any]] = {}
    for row in progress.to_dict("records"):
        name = str(row.pop("order_id"))
        rows[name] = {**{str(key): value for key, value in row.items()}, "changes": []}
    for row in table.to_dict("records"):
        rows[str(row.pop("order_id"))]["changes"].append(row)
    return rows


def _total(progress: pd.DataFrame, table: pd.DataFrame) -> dict[str, Any]:
    """All orders together: whole cost and what changes it; shares of several symbols do not add."""
    notional = float(progress["notional"].sum())
    cost = table.groupby("change", sort=False)["expected_cost"].sum()
    ordered = [PLAN, *(name for name in cost.index if name not in (PLAN, NOW)), NOW]
    return {
        "orders": len(progress),
        "notional": notional,
        "changes": [
            {
                "change": name,
                "expected_cost": float(cost[name]),
                "bps": 1e4 * float(cost[name]) / notional,
            }
            for name in ordered
        ],
        **{
            state: int(np.sum(progress["verdict"] == state))
            for state in ("ahead", "behind", "on plan")
        },
    }
