"""The verb `plan`: orders and a market in, a slice schedule with its cost and risk out."""

from __future__ import annotations

import datetime
import time
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from importlib import import_module
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scheduler.balances import (
    as_schedule,
    balances_frame,
    corridor_excess,
    list_certificate,
    list_figures,
    order_parts,
)
from scheduler.constraints import check_solver, notes_on_constraints, with_constraints
from scheduler.doubts import Doubts, EstimateSource, asked_doubts, check_alone, in_inputs, weigh
from scheduler.errors import InfeasibleError, MisuseError, NotConvergedError
from scheduler.figures import Figures
from scheduler.holdings import orders_from_holdings
from scheduler.intake import Book, Finish, take_in
from scheduler.limits import check_feasible, notes_on_budgets, notes_on_limits
from scheduler.list_targets import list_for_budgets
from scheduler.model.ragged import Array, Index
from scheduler.outcome import schedule_frame
from scheduler.problem import Problem
from scheduler.settings import DEFAULTS, Settings
from scheduler.solve import interior
from scheduler.solve.schedule import Progress, Schedule, Solver
from scheduler.solve.slices import Sliced, notes_on_lots, slice_orders
from scheduler.summary import summarise
from scheduler.tables import holdings
from scheduler.tables import market as market_table
from scheduler.tables.draft import Checked, ignored
from scheduler.tables.inputs import Inputs, read_inputs
from scheduler.tables.source import Source, Stored, name_of
from scheduler.tables.write import check_not_over, encode, write_files
from scheduler.targets import MOST_URGENT, for_cost_budget, for_risk_budget
from scheduler.transition import Transition, in_lots, is_list, link, solve_list

FILES = (
    "schedule.csv",
    "schedule.parquet",
    "balances.csv",
    "balances.parquet",
    "summary.json",
    "report.html",
)
AIMS = ("urgency", "risk_aversion", "risk_budget", "cost_budget")


@dataclass(frozen=True)
class Asked:
    """What a plan was asked for, so that it can be asked for again.

    tables : as read, by the name of their option. now : the moment (UTC) taken for the present.
    doubts : estimates to draw from, and worlds to be robust in, if any.
    """

    tables: Mapping[str, Checked]
    now: pd.Timestamp
    at: str | None = None
    finish: tuple[Finish, ...] = ()
    soften: bool = False
    ignore_columns: tuple[str, ...] = ()
    doubts: Doubts | None = None

    def read(self) -> dict[str, Stored]:
        """All that was read, byte for byte, by option."""
        raw = {name: table.raw for name, table in self.tables.items() if table.raw is not None}
        found = {
            name: each.stored() if each.file else replace(each.stored(), source=name)
            for name, each in raw.items()
        }
        estimates = None if self.doubts is None else self.doubts.estimates
        if estimates is not None and estimates.file is not None:
            found["uncertainty"] = estimates.file
        return found


@dataclass(frozen=True)
class Plan:
    """A slice schedule with its figures.

    schedule : one row an order and bucket. summary : every figure, ready for JSON.
    notes : what the user should know. balances : of a list planned as one, a row an interval;
    None for orders planned alone. book, figures, transition (of a list) : the arrays behind them.
    inputs, finish : the tables, and what was to be done by when; a re-plan starts from them.
    read_from : the directory it was read back from, if it was.
    asked : what it takes to plan again; None of a plan that was not made from tables.
    """

    schedule: pd.DataFrame
    summary: dict[str, Any]
    notes: tuple[str, ...]
    book: Book = field(repr=False)
    figures: Figures = field(repr=False)
    balances: pd.DataFrame | None = None
    transition: Transition | None = field(default=None, repr=False)
    inputs: Inputs | None = field(default=None, repr=False)
    finish: tuple[Finish, ...] = ()
    read_from: str | None = None
    asked: Asked | None = field(default=None, repr=False)

    @property
    def certificate(self) -> dict[str, dict[str, Any]]:
        """How far each order's schedule is known to be the best, by order_id."""
        return {name: row["certificate"] for name, row in self.summary["orders"].items()}

    def figure(self, name: str, order_id: str | None = None) -> Any:
        """A chart of one order (the first, if not named), as a plotly figure.

        Raises:
            MisuseError: no such figure or order. MissingExtraError: plotly is not installed.
        """
        return import_module("scheduler.report.figures").figure(self, name, order_id)

    def files(self, *, report: bool = False, parquet: bool = False) -> dict[str, Any]:
        """What `write` writes, by name, tables and summary as bytes."""
        files: dict[str, Any] = dict(self._as_parquet if parquet else self._as_csv)
        if report:
            files["report.html"] = import_module("scheduler.report.page").page(self)
        return files

    def write(self, directory: str | Path, *, report: bool = False, parquet: bool = False) -> None:
        """Write schedule, summary and, if asked for, the report page: all of them or nothing."""
        files = self.files(report=report, parquet=parquet)
        check_not_over(self.book.inputs.values(), directory, (*files, *FILES))
        write_files(directory, files, instead_of=FILES)

    @cached_property
    def _as_csv(self) -> dict[str, bytes]:
        return self._encoded("csv")

    @cached_property
    def _as_parquet(self) -> dict[str, bytes]:
        return self._encoded("parquet")

    def _encoded(self, suffix: str) -> dict[str, bytes]:
        files: dict[str, Any] = {f"schedule.{suffix}": self.schedule, "summary.json": self.summary}
        if self.balances is not None:
            files[f"balances.{suffix}"] = self.balances
        return {name: encode(name, content) for name, content in files.items()}


def plan(
    orders: Source | None,
    market: Source,
    *,
    legacy: Source | None = None,
    target: Source | None = None,
    profiles: Source | None = None,
    readings: Source | None = None,
    exposures: Source | None = None,
    factor_covariance: Source | None = None,
    returns: Source | None = None,
    corridors: Source | None = None,
    constraints: Source | None = None,
    soften: bool = False,
    settings: Settings = DEFAULTS,
    date: str | datetime.date | None = None,
    at: str | None = None,
    finish: str | Finish | Iterable[str | Finish] = (),
    ignore_columns: Iterable[str] = (),
    uncertainty: EstimateSource | None = None,
    worst_of: str | Sequence[str] = (),
    now: pd.Timestamp | None = None,
    progress: Progress | None = None,
) -> Plan:
    """Plan the slices of every order.

    In place of orders, two sets of holdings may be given: what `legacy` holds is moved to `target`.
    With a risk table (exposures and factor covariance, or returns) or corridors, the orders are
    planned as one list; otherwise each alone.

    Parameters
    ----------
    orders, market, legacy, target, profiles, readings, exposures, factor_covariance, returns,
        corridors, constraints : paths, `-` or DataFrames with the documented columns.
    constraints : further linear limits on slices; they need the conic solver.
    soften : let corridors that no schedule keeps give way by the least amount, with a note.
    date, at : session and planning time (default: the current or next session; now, or its open).
    finish : fractions to be done by given times, as in "0.9@14:30" (default: the settings').
    uncertainty : estimates with intervals, a JSON file or what it holds: the summary then says
    what cost, risk and the best schedule are over draws of them.
    worst_of : laws of impact, or "draws": the schedule whose worst regret over them is least.
    now : what to take for the present (UTC), to plan as at an earlier moment.
    progress : called with orders solved and orders in all.

    Raises:
        InputError: everything wrong with the input, at once.
        InfeasibleError: an order cannot keep its limits; says which and by how much.
        NotConvergedError: the solver stopped short of its tolerance.
    """
    if not isinstance(settings, Settings):
        raise MisuseError("settings must be Settings; read a file with read_settings")
    if not (at is None or isinstance(at, str)):
        raise MisuseError(f"at must be text such as 09:30 or 2026-03-05T09:30, not {at!r}")
    done_by = asked_finish(finish, settings)
    settings = settings.with_values("plan", finish=",".join(item.text for item in done_by))
    check_aim(settings)
    doubts = asked_doubts(uncertainty, worst_of, settings)
    if constraints is not None:
        check_solver(settings)
    names = tuple(sorted(ignored(ignore_columns)))
    now = pd.Timestamp.now(tz="UTC") if now is None else now
    orders, moved, held = _orders(orders, market, legacy, target, settings)
    inputs = read_inputs(
        orders,
        market,
        profiles=profiles,
        readings=readings,
        exposures=exposures,
        factor_covariance=factor_covariance,
        returns=returns,
        corridors=corridors,
        constraints=constraints,
        ignore_columns=names,
        settings=settings,
    )
    inputs = replace(inputs, notes=(*moved, *inputs.notes))
    together = is_list(inputs)
    if together and doubts is not None:
        raise MisuseError("uncertainty and worst_of are for orders planned alone, not for a list")
    day = session_day(date)
    book = take_in(inputs, settings, day=day, at=at, finish=done_by, together=together, now=now)
    book = with_constraints(book, inputs)
    book = replace(book, inputs=_came_from(book.inputs, legacy, target))
    asked = Asked(_asked_tables(inputs, held), now, at, done_by, soften, names, doubts)
    if together:
        made = plan_list(book, inputs, soften=soften)
    else:
        made = plan_book(book, doubts=doubts, progress=progress)
    return replace(made, inputs=inputs, finish=done_by, asked=asked)


def _asked_tables(inputs: Inputs, held: Mapping[str, Checked]) -> dict[str, Checked]:
    """The tables given, by option: holdings in place of the orders that were made of them."""
    tables = {name: table for name, table in vars(inputs).items() if isinstance(table, Checked)}
    if held:
        del tables["orders"]
    return {**tables, **held}


def session_day(date: str | datetime.date | None) -> datetime.date | None:
    """The session asked for, as a date; None, if none was."""
    if not isinstance(date, str):
        return date
    try:
        return datetime.date.fromisoformat(date)
    except ValueError:
        raise MisuseError(f"date {date!r} is no date; write it as in 2026-03-05") from None


def asked_finish(
    finish: str | Finish | Iterable[str | Finish], settings: Settings
) -> tuple[Finish, ...]:
    """What is to be done by when: as asked, or else as in the settings."""
    given = [finish] if isinstance(finish, (str, Finish)) else list(finish)
    given = given or [text for text in settings.plan.finish.split(",") if text]
    return tuple(Finish.parse(item) if isinstance(item, str) else item for item in given)


def _orders(
    orders: Source | None,
    market: Source,
    legacy: Source | None,
    target: Source | None,
    settings: Settings,
) -> tuple[Source, tuple[str, ...], dict[str, Checked]]:
    """The orders as given, or those that move one set of holdings to another; notes; holdings."""
    if orders is not None and legacy is None and target is None:
        return orders, (), {}
    if orders is not None or legacy is None or target is None:
        raise MisuseError("give either orders, or both legacy and target holdings")
    held, wanted = holdings.ensure(legacy), holdings.ensure(target)
    known = market_table.ensure(market, settings=settings)
    made, notes = orders_from_holdings(held, wanted, known)
    return made, notes, {"legacy": held, "target": wanted}


def _came_from(
    inputs: dict[str, str], legacy: Source | None, target: Source | None
) -> dict[str, str]:
    """Where the tables came from: holdings in place of the orders that were made of them."""
    held = {"legacy": legacy, "target": target}
    named = {
        name: name if isinstance(source, pd.DataFrame) else name_of(source)
        for name, source in held.items()
        if source is not None
    }
    return inputs if not named else {k: v for k, v in inputs.items() if k != "orders"} | named


def plan_book(
    book: Book,
    *,
    doubts: Doubts | None = None,
    progress: Progress | None = None,
    brief: bool = False,
) -> Plan:
    """Plan orders that are already arrays; `brief` as in `summarise`."""
    if doubts is not None:
        check_alone(book, doubts)
        book = in_inputs(book, doubts)
    check_feasible(book)
    solver = solver_of(book.settings)
    book = _aimed(book, solver)
    sliced = slice_orders(book.arrays, book.lot, book.min_slice, solver, progress=progress)
    _check_converged(book, sliced.schedule)
    weighed = None if doubts is None else weigh(book, sliced, doubts, solver, progress)
    if weighed is not None:
        sliced, book = weighed.sliced, replace(book, notes=(*book.notes, *weighed.notes))
    figures = Figures(book.arrays, book.charges, sliced.shares)
    lots = [f"{book.names[order]}: {text}" for order, text in sliced.notes]
    ideal = Figures(book.arrays, book.charges, sliced.schedule.shares)
    bound = notes_on_limits(book.pooled, figures.pooled, ideal.pooled.shares)
    one = figures.pooled
    std, cost = (1e4 * money / one.notional for money in (one.cost_std, one.expected_cost))
    budgets = notes_on_budgets(book.settings.plan, book.pooled.names, std, cost)
    missed = notes_on_constraints(book, sliced.shares)
    book = replace(book, notes=(*book.notes, *bound, *lots, *budgets, *missed))
    summary = summarise(book, figures, sliced, brief=brief)
    if weighed is not None:
        weighed.into(summary)
    return Plan(schedule_frame(book, figures), summary, book.notes, book, figures)


def plan_list(book: Book, inputs: Inputs, *, soften: bool = False, brief: bool = False) -> Plan:
    """Plan orders that share risk and corridors as one list; `brief` as in `summarise`."""
    check_feasible(book)
    clock = time.perf_counter()
    transition = link(book, inputs, soften=soften)
    transition, given_way = list_for_budgets(transition, soften=soften)
    arrays, asked = book.arrays, transition.book.arrays
    every = np.full(len(arrays), asked.urgency[0]), np.full(len(arrays), asked.risk_aversion[0])
    book = replace(book, arrays=arrays.asking(*every))
    solved = solve_list(transition, soften=soften)
    seconds = time.perf_counter() - clock
    shares = in_lots(transition, book.arrays, solved, book.lot)
    figures = Figures(book.arrays, book.charges, shares)
    lots = notes_on_lots(book.arrays, book.arrays, shares, book.lot, book.min_slice)
    odd = [f"{book.names[order]}: {text}" for order, text in lots]
    bound = notes_on_limits(book.pooled, figures.pooled, solved.shares)
    given = corridor_excess(transition, solved.shares)  # by softening, before whole lots
    broken = [
        f"corridor {name}: whole lots miss it by up to {more:,.0f} {book.currency}".rstrip()
        for name, excess in corridor_excess(transition, figures.pooled.shares).items()
        if (more := excess - given[name]) >= 0.5
    ]
    missed = notes_on_constraints(book, shares)
    found = (*transition.notes, *given_way, *solved.notes, *bound, *odd, *broken, *missed)
    book = replace(book, notes=(*book.notes, *found))
    schedule = as_schedule(transition, book.arrays, solved, seconds)
    summary = summarise(book, figures, Sliced(shares, schedule, ()), brief=brief)
    for name, parts in zip(book.names, order_parts(transition, figures), strict=True):
        summary["orders"][name] |= parts
    summary["total"] |= list_figures(transition, figures.pooled, solved)
    summary["total"]["certificate"] = list_certificate(transition, solved, figures.pooled, seconds)
    std, cost = (
        np.array([summary["total"][f"{name}_bps"]]) for name in ("cost_std", "expected_cost")
    )
    budgets = notes_on_budgets(book.settings.plan, ["the list"], std, cost)
    book = replace(book, notes=(*book.notes, *budgets))
    summary["notes"] = list(book.notes)
    return Plan(
        schedule_frame(book, figures),
        summary,
        book.notes,
        book,
        figures,
        balances_frame(transition, figures.pooled.shares),
        transition,
    )


def solver_of(settings: Settings) -> Solver:
    """The solver a setting names."""
    return _conic if settings.plan.solver == "conic" else interior.solve


def _conic(
    problem: Problem, *, start: Array | None = None, feedback_share: float = 1.0
) -> interior.Solution:
    """The conic solver called as the interior one is; it has no use for a start."""
    from scheduler.solve import conic  # noqa: PLC0415 - loads cvxpy

    weight = feedback_share * problem.feedback_weight
    return conic.solve(replace(problem, feedback_weight=weight))


def check_aim(settings: Settings) -> None:
    """Refuse settings that ask for more than one aim."""
    given = [name for name in AIMS if getattr(settings.plan, name) is not None]
    if len(given) > 1:
        raise MisuseError(f"{' and '.join(given)} exclude each other; give one of them")


def _aimed(book: Book, solver: Solver) -> Book:
    """The book with the urgency that meets its risk or cost budget, if it has one."""
    settings = book.settings.plan
    if settings.risk_budget is not None:
        budget, name, word = settings.risk_budget, "risk_budget", "standard deviation"
        found = for_risk_budget(book.arrays, book.charges, budget, solver)
    elif settings.cost_budget is not None:
        budget, name, word = settings.cost_budget, "cost_budget", "expected cost"
        found = for_cost_budget(book.arrays, book.charges, budget, solver)
    else:
        return book
    if not found.within.all():
        leads = _leads(book)
        lines = [
            f"order {book.pooled.names[place]}: {name} {budget:g} bps is out of reach; the "
            f"least {word} attainable is {found.attainable[order]:.2f} bps"
            for place, order in enumerate(leads)
            if not found.within[order]
        ]
        raise InfeasibleError("\n".join(lines))
    arrays = book.arrays.asking(found.urgency, np.zeros(len(found.urgency)))
    book = replace(book, arrays=arrays)
    free = found.urgency[_leads(book)] == (MOST_URGENT if name == "cost_budget" else 0.0)
    pace = "most urgent" if name == "cost_budget" else "most patient"
    loose = [
        f"{book.pooled.names[order]}: {name} {budget:g} bps does not bind; this is the {pace} "
        "schedule"
        for order in np.flatnonzero(free)
    ]
    return replace(book, notes=(*book.notes, *loose))


def _leads(book: Book) -> Index:
    """One order of each pool."""
    pools = book.arrays.pools
    return np.arange(len(book.names)) if pools is None else pools.lead


def _check_converged(book: Book, solved: Schedule) -> None:
    if solved.converged.all():
        return
    names = [book.names[order] for order in np.flatnonzero(~solved.converged)]
    raise NotConvergedError(
        f"no schedule found to tolerance for order {', '.join(names[:20])}; try --solver "
        f"{'interior' if book.settings.plan.solver == 'conic' else 'conic'}, longer buckets or a "
        "looser cap"
    )
