"""What the caps allow, in words: refusals before a solve, notes after it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import InfeasibleError
from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.sessions import Kind
from scheduler.settings import PlanSettings
from scheduler.solve.feasible import Reach, reach
from scheduler.solve.windows import missing, needs, pieces

_ROUNDING = 1e-12
_WITHIN = 0.01  # bps
_LARGE = 0.05  # of the largest slice: less above a cap is what lots always do
_BINDS = 1e-4  # as near as a solver comes to a cap
_CAPS = {Kind.CONTINUOUS: "max_participation", Kind.AUCTION: "max_auction_participation"}


def check_feasible(book: Book) -> None:
    """Refuse orders whose caps do not let them complete, or be as far as `finish` asks.

    Raises:
        InfeasibleError: for every such order the most that can be done, and which limit binds.
    """
    found = reach(book.arrays)
    short = _short(book, found)
    lines = [_too_little(book, found, i) for i in _where(short)]
    lines += [_too_late(book, found, i) for i in _where((found.late >= 0) & ~short)]
    lines += [] if lines else _too_narrow(book)
    if lines:
        raise InfeasibleError("\n".join(lines))


def incomplete(book: Book) -> NDArray[np.bool_]:
    """(N,) the orders that `check_feasible` refuses."""
    found = reach(book.arrays)
    result: NDArray[np.bool_] = _short(book, found) | (found.late >= 0)
    return result


def _short(book: Book, found: Reach) -> NDArray[np.bool_]:
    """(N,) orders that must complete and cannot."""
    short: NDArray[np.bool_] = found.most < book.arrays.quantity * (1.0 - _ROUNDING)
    return short & book.must_complete


def _too_little(book: Book, found: Reach, order: int) -> str:
    return (
        f"order {book.names[order]}: at most {found.most[order]:,.0f} of "
        f"{book.arrays.quantity[order]:,.0f} shares can trade in its window under "
        f"{caps_in_words(book, order)}; raise the cap, widen the window, or set must_complete "
        "to false"
    )


def _too_late(book: Book, found: Reach, order: int) -> str:
    quantity = book.arrays.quantity[order]
    done = quantity - found.least_left[order]
    time = book.grids[order].local_end[int(found.late[order])]
    return (
        f"order {book.names[order]}: finish asks for more by {time} than the {done:,.0f} of "
        f"{quantity:,.0f} shares ({done / quantity:.1%}) possible under "
        f"{caps_in_words(book, order)}; raise the cap or finish later"
    )


def _too_narrow(book: Book) -> list[str]:
    """Orders that share a symbol whose windows the caps on their total do not serve."""
    pools, cap = book.arrays.pools, book.pooled.arrays.cap
    if pools is None:
        return []
    all_of = pieces(book.arrays, np.flatnonzero(pools.joined))
    asked = needs(book.arrays, all_of, whole=True)
    quantity = book.pooled.arrays.quantity[book.pooled.layout.owner]
    short = missing(asked, np.minimum(cap, quantity))
    worst = np.flatnonzero(short > asked.least * _ROUNDING)
    lines = []
    for pool in np.unique(asked.pool[worst]).tolist():
        span = min(worst[asked.pool[worst] == pool], key=lambda i: asked.last[i] - asked.first[i])
        grid, first = book.pooled.grids[pool], book.pooled.layout.first[pool]
        lines.append(
            f"orders {book.pooled.names[pool]}: at most {asked.least[span] - short[span]:,.0f} of "
            f"the {asked.least[span]:,.0f} shares that they need from "
            f"{grid.local_start[asked.first[span] - first]} to "
            f"{grid.local_end[asked.last[span] - first]} can trade under "
            f"{caps_in_words(book.pooled, pool)}; raise the cap or widen a window"
        )
    return lines


def caps_in_words(book: Book, order: int) -> str:
    """The caps that an order's buckets are under."""
    span = slice(book.layout.first[order], book.layout.last[order] + 1)
    kind, rate = book.kind[span], book.cap_rate[span]
    present = [(name, kind == value) for value, name in _CAPS.items() if (kind == value).any()]
    return " and ".join(f"{name} {rate[mask].max():g}" for name, mask in present)


def notes_on_limits(book: Book, figures: Figures, ideal: Array) -> list[str]:
    """Which orders' caps bind, and what they leave undone.

    ideal : (M,) the slices before rounding, which may leave them less than a lot below a cap.
    """
    cap = book.arrays.cap
    binding = (ideal > 0.0) & (ideal >= cap * (1.0 - _BINDS))
    notes = []
    for kind, name in _CAPS.items():
        count = book.layout.sum(np.where(binding & (book.kind == kind), 1.0, 0.0))
        words = {
            i: "1 bucket" if count[i] == 1 else f"{count[i]:.0f} buckets" for i in _where(count)
        }
        notes += [f"{book.names[i]}: {name} binds in {words[i]}" for i in words]
    over = book.layout.max(np.where(cap > 0.0, figures.shares - cap, 0.0))
    worst = np.where(over > 1e-6 * book.arrays.quantity, over, 0.0)
    worst = np.where(worst > _LARGE * book.layout.max(figures.shares), worst, 0.0)
    notes += [
        f"{book.names[i]}: whole lots take a slice {worst[i]:,.0f} shares above its cap"
        for i in _where(worst)
    ]
    notes += [
        f"{book.names[i]}: {figures.residual[i]:,.0f} shares stay undone under "
        f"{caps_in_words(book, i)}"
        for i in _where(figures.residual)
    ]
    return notes


def notes_on_budgets(
    plan: PlanSettings, names: Sequence[str], std_bps: Array, cost_bps: Array
) -> list[str]:
    """Budgets that whole lots, or dropped slices, exceed: they were met before those.

    names : of what the budgets are of. std_bps, cost_bps : (N,) of its value, as rounded.
    """
    budgets = (
        ("risk_budget", plan.risk_budget, std_bps, "risk"),
        ("cost_budget", plan.cost_budget, cost_bps, "cost"),
    )
    return [
        f"{names[i]}: {name} {budget:g} bps is met before whole lots and min_slice; "
        f"with them the {word} is {bps[i]:.2f} bps"
        for name, budget, bps, word in budgets
        if budget is not None
        for i in _where(bps > budget + _WITHIN)
    ]


def _where(mask: Array | np.ndarray[tuple[int], np.dtype[np.bool_]]) -> list[int]:
    positions: list[int] = np.flatnonzero(mask).tolist()
    return positions
