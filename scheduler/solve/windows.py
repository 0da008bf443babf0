"""Orders of one symbol, solved as one total: what their windows ask of it, and each one's share.

Pieces are what an order must have traded by a time: all of it by the end of its window, and parts
of it by its ceilings. A total q serves all pieces exactly when, for every span of stages,

    sum_{t in span} q_t >= what the pieces whose windows lie in the span amount to

(Hall's condition; with windows that are intervals, spans from a first to a last stage suffice).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.coupling import Spans
from scheduler.model.pools import Pools
from scheduler.model.ragged import Array, Index
from scheduler.problem import Orders, Problem

_SURE = 1e-6  # of a lot or a share: less is rounding
_ROOM = 1e-7  # of a quantity: what a solver needs inside spans that caps only just suffice for


@dataclass(frozen=True)
class Pieces:
    """order : (P,) whose. first, last : (P,) stages among those of the pools. amount : (P,)."""

    order: Index
    first: Index
    last: Index
    amount: Array

    def take(self, which: Index) -> Pieces:
        return Pieces(*(value[which] for value in vars(self).values()))


@dataclass(frozen=True)
class Needs:
    """Least shares of a pool's total from a first to a last stage, (S,) each."""

    pool: Index
    first: Index
    last: Index
    least: Array

    def take(self, which: Index) -> Needs:
        return Needs(*(value[which] for value in vars(self).values()))


def pools_of(orders: Orders) -> Pools:
    """The pools of orders, of one order each where none share a state."""
    layout = orders.stages.layout
    return orders.pools or Pools(np.arange(len(layout.size)), layout)


def pieces(orders: Orders, which: Index) -> Pieces:
    """The pieces of some orders, each of which has a stage that may trade."""
    layout, pools = orders.stages.layout, pools_of(orders)
    found: list[tuple[int, int, int, float]] = []
    for order in which.tolist():
        inside = slice(layout.first[order], layout.last[order] + 1)
        usable = np.flatnonzero(orders.cap[inside] > 0.0)
        quantity = float(orders.quantity[order])
        due = quantity - np.minimum(orders.ceiling[inside], quantity)
        due[usable[-1] :] = quantity
        more = np.diff(np.maximum.accumulate(due), prepend=0.0)
        begin = int(pools.layout.first[pools.of[order]])
        for stage in np.flatnonzero(more > 0.0):
            last = usable[usable <= stage].max(initial=usable[0])
            found.append((order, begin + int(usable[0]), begin + int(last), float(more[stage])))
    whole, amount = _columns(found)
    return Pieces(whole[0], whole[1], whole[2], amount)


def needs(orders: Orders, asked: Pieces, *, whole: bool = False) -> Needs:
    """What the pieces need of the totals; with `whole`, also of a pool's whole window."""
    pool = pools_of(orders).of[asked.order]
    found: list[tuple[int, int, int, float]] = []
    for number in np.unique(pool).tolist():
        mine = asked.take(np.flatnonzero(pool == number))
        begin, end = mine.first.min(), mine.last.max()
        for first in np.unique(mine.first):
            for last in np.unique(mine.last):
                inside = (mine.first >= first) & (mine.last <= last)
                if not inside.any() or (first == begin and last == end and not whole):
                    continue
                # a span wider than the windows in it asks for less than they do
                if mine.first[inside].min() == first and mine.last[inside].max() == last:
                    found.append((number, first, last, float(mine.amount[inside].sum())))
    whole_numbers, least = _columns(found)
    return Needs(whole_numbers[0], whole_numbers[1], whole_numbers[2], least)


def _columns(rows: list[tuple[int, int, int, float]]) -> tuple[Index, Array]:
    table = np.array(rows, dtype=float).reshape(-1, 4).T
    return table[:3].astype(np.int64), table[3]


def windows(orders: Orders) -> Needs:
    """What windows and ceilings need of every total."""
    ceilings = orders.stages.layout.min(orders.ceiling) < np.inf
    return needs(orders, pieces(orders, np.flatnonzero(pools_of(orders).joined | ceilings)))


def missing(asked: Needs, totals: Array) -> Array:
    """(S,) what totals by stage lack of each span, 0 where it is served."""
    upto = np.concatenate(([0.0], np.cumsum(totals)))
    result: Array = np.maximum(asked.least - (upto[asked.last + 1] - upto[asked.first]), 0.0)
    return result


def spans_of(asked: Needs, problem: Problem) -> Spans:
    """The needs in terms of a problem's free buckets and parts of its quantities."""
    first = np.searchsorted(problem.bucket, asked.first)
    last = np.searchsorted(problem.bucket, asked.last, side="right") - 1
    least = asked.least / problem.quantity[asked.pool]
    return Spans(first, last, least * (1.0 - _ROOM))


def divide(orders: Orders, totals: Array) -> Array:
    """(M,) slices of the orders from the totals of their pools, stage by stage.

    Each total is shared in proportion to what the orders open have left, but for what the earliest
    deadlines need. The totals must serve every span.
    """
    pools = pools_of(orders)
    result = np.where(pools.joined[orders.stages.layout.owner], 0.0, totals[pools.place])
    joined = np.flatnonzero(pools.joined)
    if not len(joined):
        return result
    asked = pieces(orders, joined)
    pool, layout = pools.of[asked.order], orders.stages.layout
    for number in np.unique(pool).tolist():
        mine = asked.take(np.flatnonzero(pool == number))
        begin = int(pools.layout.first[number])
        slices = _shared_out(mine, totals, begin, int(pools.layout.size[number]))
        for order, part in zip(mine.order, slices, strict=True):
            result[layout.first[order] : layout.last[order] + 1] += part
    return result


def _shared_out(asked: Pieces, totals: Array, begin: int, count: int) -> Array:
    """(P, T) what each piece gets of every stage of its pool."""
    left = asked.amount.copy()
    given = np.zeros((len(left), count))
    upto = np.concatenate(([0.0], np.cumsum(totals[begin : begin + count])))
    for stage in range(begin, begin + count):
        here = (asked.first <= stage) & (asked.last >= stage)
        open_left = np.where(here, left, 0.0)
        room = open_left.sum()
        total = min(float(totals[stage]), float(room))
        if total <= 0.0:
            continue
        part = total * open_left / room
        for deadline in np.unique(asked.last[here]):
            due = here & (asked.last <= deadline)
            coming = (asked.first > stage) & (asked.last <= deadline)
            later = upto[deadline - begin + 1] - upto[stage - begin + 1]
            short = left[due].sum() + left[coming].sum() - later - part[due].sum()
            _pull_forward(part, left, due, here & ~due, short)
        given[:, stage - begin] = part
        left = np.maximum(left - part, 0.0)
    exact: Array = given * (asked.amount / given.sum(axis=1))[:, None]
    return exact


def _pull_forward(part: Array, left: Array, due: Array, others: Array, short: float) -> None:
    """Move `short` shares of a stage from later deadlines to the pieces that are due."""
    spare = part[others].sum()
    room = left[due] - part[due]
    move = min(short, float(spare), float(room.sum()))
    if move > 0.0:
        part[others] *= 1.0 - move / spare
        part[due] += move * room / room.sum()


def in_lots(orders: Orders, shares: Array, lot: Array, pool: int) -> tuple[Index, Array]:
    """The k orders of a pool, and their (k, T) slices in whole lots, from (M,) ideal slices.

    Every slice, every stage's total, and what an order and the pool have traded by the end of every
    stage are the ideal ones rounded down or up. Such a rounding exists: the bounds are on two
    nested families of sums, whose matrix is totally unimodular, and the ideal slices keep them; so
    the linear programme that rounds to the nearest has whole numbers at its vertices.
    """
    from scipy.optimize import linprog  # noqa: PLC0415
    from scipy.sparse import csr_array, kron, tril, vstack  # noqa: PLC0415

    layout, members = orders.stages.layout, np.flatnonzero(pools_of(orders).of == pool)
    at = layout.first[members][:, None] + np.arange(layout.size[members[0]])
    ideal = shares[at] / lot[members[0]]
    count, stages = ideal.shape
    down = np.floor(ideal + _SURE)
    up = np.minimum(np.ceil(ideal - _SURE), down + 1.0)
    eye, running = csr_array(np.eye(count)), tril(np.ones((stages, stages)))
    one = csr_array(np.ones((1, count)))
    sums = vstack(
        (kron(eye, running), kron(one, csr_array(np.eye(stages))), kron(one, running)), format="csr"
    )
    value = sums @ ideal.ravel()
    low, high = np.floor(value + _SURE), np.ceil(value - _SURE)
    due = np.ceil(_due(orders, members, at) / lot[members[0]] - _SURE).ravel()
    low[: len(due)] = np.minimum(np.maximum(low[: len(due)], due), high[: len(due)])
    ends = np.arange(1, count + 1) * stages - 1
    low[ends] = high[ends] = np.round(orders.quantity[members] / lot[members[0]])
    found = linprog(
        (1.0 - 2.0 * (ideal - down)).ravel(),
        A_ub=vstack((sums, -sums)),
        b_ub=np.concatenate((np.maximum(high, low), -low)),
        bounds=np.column_stack((down.ravel(), up.ravel())),
        method="highs-ds",
    )
    assert found.x is not None, "the rounding of a pool has no solution"
    return members, np.round(found.x).reshape(count, stages) * lot[members[0]]


def _due(orders: Orders, members: Index, at: Index) -> Array:
    """(k, T) shares that ceilings ask each order to have traded after each stage."""
    quantity = orders.quantity[members][:, None]
    result: Array = quantity - np.minimum(orders.ceiling[at], quantity)
    return result
