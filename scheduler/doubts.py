"""What a plan is asked of its own doubts: estimates with intervals, worlds to be robust in."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import MisuseError, NotConvergedError
from scheduler.intake import Book
from scheduler.least_regret import choose
from scheduler.problem import Orders
from scheduler.settings import LAWS, Settings
from scheduler.solve.schedule import Progress, Solver
from scheduler.solve.slices import Sliced
from scheduler.tables.estimates import Estimates, read_estimates
from scheduler.tables.source import Stored
from scheduler.uncertainty import over_draws
from scheduler.worlds import best_in, draw_worlds, law_worlds

EstimateSource: TypeAlias = str | Path | Mapping[str, Any] | Stored

_DRAWS = "draws"


@dataclass(frozen=True)
class Doubts:
    """estimates : to draw parameters from, if any. worst_of : laws, or `draws`, or nothing."""

    estimates: Estimates | None
    worst_of: tuple[str, ...]


def asked_doubts(
    uncertainty: EstimateSource | None, worst_of: str | Sequence[str], settings: Settings
) -> Doubts | None:
    """What is asked for, read and checked; None if nothing is.

    Raises:
        InputError: estimates that cannot be used.
        MisuseError: unknown worlds, draws without estimates, a robust choice under a budget.
    """
    names = worst_of.split(",") if isinstance(worst_of, str) else list(worst_of)
    names = list(dict.fromkeys(str(name).strip() for name in names if str(name).strip()))
    known = (*LAWS, _DRAWS)
    if unknown := [name for name in names if name not in known]:
        raise MisuseError(f"worst_of {', '.join(unknown)}: known are {', '.join(known)}")
    if _DRAWS in names and uncertainty is None:
        raise MisuseError("worst_of draws needs estimates to draw from: give uncertainty")
    budgets = [name for name in ("risk_budget", "cost_budget") if _is_set(settings, name)]
    if names and budgets:
        raise MisuseError(
            f"worst_of weighs risk at one price and keeps no {budgets[0]}; give an urgency or a "
            "risk_aversion"
        )
    if uncertainty is None:
        return Doubts(None, tuple(names)) if names else None
    return Doubts(read_estimates(uncertainty), tuple(names))


def _is_set(settings: Settings, name: str) -> bool:
    return getattr(settings.plan, name) is not None


def check_alone(book: Book, doubts: Doubts) -> None:
    """Refuse orders that share a state, and slices that the robust choice cannot keep.

    Raises:
        MisuseError: what is in the way.
    """
    if book.arrays.pools is not None:
        raise MisuseError(
            "uncertainty and worst_of are for orders planned alone; some share a symbol: plan "
            "them one by one, or as one order"
        )
    if doubts.worst_of and (book.min_slice > 0.0).any():
        raise MisuseError("worst_of keeps no min_slice: leave that column out")
    if doubts.worst_of and book.arrays.rows:
        raise MisuseError("worst_of keeps no constraints: give one or the other")


@dataclass(frozen=True)
class Weighed:
    """The schedule chosen, and what the summary says of it."""

    sliced: Sliced
    notes: tuple[str, ...]
    rows: list[dict[str, Any]] = field(repr=False)
    total: dict[str, Any] = field(repr=False)

    def into(self, summary: dict[str, Any]) -> None:
        """Add to a plan's summary. At a robust choice lambda is the one it was made at."""
        for row, more in zip(summary["orders"].values(), self.rows, strict=True):
            row.update(more)
            if "worst_of" in more:
                row["risk_aversion"] = more["worst_of"]["risk_aversion"]
        summary["total"] |= self.total


def weigh(
    book: Book, sliced: Sliced, doubts: Doubts, solver: Solver, progress: Progress | None = None
) -> Weighed:
    """Make the robust choice, if asked to, and say what draws make of the schedule.

    Raises:
        NotConvergedError: an order of some world was not solved to tolerance.
    """
    price, plain = sliced.schedule.risk_aversion, sliced.schedule.shares
    laws = law_worlds(book, [name for name in doubts.worst_of if name != _DRAWS])
    draws = {} if doubts.estimates is None else draw_worlds(book, doubts.estimates)
    worlds = {**laws, **draws}
    best, found = best_in(list(worlds.values()), price, plain, solver, progress)
    _check_found(book, worlds, found)
    rows: list[dict[str, Any]] = [{} for _ in book.names]
    total: dict[str, Any] = {}
    notes = _said_of(book, doubts.estimates)
    if doubts.worst_of:
        chosen = len(worlds) if _DRAWS in doubts.worst_of else len(laws)
        among = dict(list(worlds.items())[:chosen])
        choice = choose(book, sliced, among, best[:chosen], progress)
        sliced, notes = choice.sliced, [*notes, *choice.notes]
        rows = [{"worst_of": row} for row in choice.rows]
        total["worst_of"] = {"worlds": list(doubts.worst_of), **_in_all(book, choice.rows)}
    if draws:
        of_draws = best[len(laws) :]
        told, total["uncertainty"] = over_draws(book, draws, of_draws, sliced.shares, price)
        rows = [{**row, "uncertainty": more} for row, more in zip(rows, told, strict=True)]
    return Weighed(sliced, tuple(notes), rows, total)


def _in_all(book: Book, rows: list[dict[str, Any]]) -> dict[str, float | int]:
    """Worst regrets of all orders added up, in basis points of what they are worth."""
    notional = book.arrays.quantity * book.arrays.market.price
    part = notional / notional.sum()
    names = ("worst_regret_bps", "plain_worst_regret_bps")
    added: dict[str, float | int] = {
        name: float(part @ np.array([row[name] for row in rows])) for name in names
    }
    return {**added, "robust": sum(row["schedule"] == "robust" for row in rows)}


def _said_of(book: Book, estimates: Estimates | None) -> list[str]:
    """Notes on the estimates, those that change nothing among them."""
    if estimates is None:
        return []
    notes = list(estimates.notes)
    drawn = any(item.name == "reading_weight" for item in estimates.items)
    if drawn and "readings" in book.inputs and book.settings.model.reading_weight == 0.0:
        notes.append("reading_weight is 0 in the settings, so its estimate changes nothing")
    return notes


def _check_found(book: Book, worlds: Mapping[str, Orders], found: NDArray[np.bool_]) -> None:
    if found.all():
        return
    world, order = np.argwhere(~found)[0]
    raise NotConvergedError(
        f"no schedule found to tolerance for order {book.names[order]} in world "
        f"{list(worlds)[world]}; try longer buckets or a looser cap, or leave that world out"
    )


def in_inputs(book: Book, doubts: Doubts) -> Book:
    """The book with the estimates among its inputs."""
    if doubts.estimates is None:
        return book
    return replace(book, inputs={**book.inputs, "uncertainty": doubts.estimates.source})
