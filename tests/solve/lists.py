"""Lists of orders tied together, from a few plain numbers; and what they cost, by plain loops.

A clock here is made of intervals; each bucket of a name takes one or more of them, a name may
begin late and end early, and stages that cannot trade stand between buckets.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from scheduler.coupling import AFTER, BEFORE, Coupling
from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from tests.builders import join, order
from tests.solve.recomputed import cost_and_risk, least_linear


@dataclass(frozen=True)
class Linked:
    """A list in the solver's form; money in `unit`."""

    orders: Orders
    problem: Problem
    coupling: Coupling
    unit: float

    @property
    def gross(self) -> float:
        """Sum of p Q in units."""
        return float((self.orders.market.price * self.orders.quantity).sum()) / self.unit

    def within(self, rows: Array, lower: Array, upper: Array) -> Linked:
        """The same with corridors, all in units of money: rows (R, N), bounds (R, T)."""
        constant = np.zeros(len(rows))
        coupling = replace(self.coupling, rows=rows, constant=constant, lower=lower, upper=upper)
        return replace(self, coupling=coupling)

    def take(self, names: Sequence[int]) -> Linked:
        """Some of the names, or all in another order."""
        at = np.array(names)
        problem, old = self.problem.take(at), self.coupling
        shift = problem.layout.first - self.problem.layout.first[at]
        bucket = old.bucket[at]
        coupling = replace(
            old,
            bucket=np.where(bucket >= 0, bucket + shift[:, None], bucket),
            begin=old.begin[at],
            end=old.end[at],
            weight=old.weight[at],
            loadings=old.loadings[at],
            rows=old.rows[:, at],
        )
        return replace(self, orders=self.orders.take(at), problem=problem, coupling=coupling)


def linked(
    orders: Orders | Sequence[Orders],
    exposures: Array | None = None,
    *,
    side: Sequence[int] | None = None,
    wait: Sequence[int] | None = None,
    pieces: Sequence[int] | None = None,
    unit: float | None = None,
) -> Linked:
    """Tie orders together by factors of unit variance.

    exposures : (N, K) fraction of price per square root of a day; the rest of a name's variance is
    its own. side : (N,) +1 or -1. wait : (N,) intervals before a name's first stage. pieces : (M,)
    intervals that each stage is made of. unit : of money; a basis point of the gross.
    """
    batch = orders if isinstance(orders, Orders) else join(orders)
    count = len(batch)
    loads = np.zeros((count, 0)) if exposures is None else np.asarray(exposures, dtype=float)
    market = batch.market
    batch = replace(batch, specific=1.0 - (loads**2).sum(axis=1) / market.vol**2)
    notional = market.price * batch.quantity
    money = 1e-4 * float(notional.sum()) if unit is None else unit
    problem = assemble(batch).in_unit(money)
    signed = notional * (np.ones(count) if side is None else np.array(side, dtype=float))
    placed = _placed(batch, problem, wait or [0] * count, pieces)
    length = placed[0].shape[1]
    coupling = Coupling(
        *placed,
        loadings=signed[:, None] * loads / money,
        rows=np.zeros((0, count)),
        constant=np.zeros(0),
        lower=np.zeros((0, length)),
        upper=np.zeros((0, length)),
    )
    return Linked(batch, problem, coupling, money)


def _placed(
    orders: Orders, problem: Problem, wait: Sequence[int], pieces: Sequence[int] | None
) -> tuple[Any, Any, Any, Any]:
    """Bucket, begin, end and weight of every name and interval, stage by stage."""
    layout = orders.stages.layout
    parts = [1] * layout.entries if pieces is None else list(pieces)
    place = {int(stage): bucket for bucket, stage in enumerate(problem.bucket)}
    lines: list[list[tuple[int, float, float, float]]] = []
    for name in range(len(orders)):
        line: list[tuple[int, float, float, float]] = [(BEFORE, 0.0, 0.0, 0.0)] * wait[name]
        leader = BEFORE
        for stage in range(layout.first[name], layout.last[name] + 1):
            leader = place.get(stage, leader)
            moves = stage in place
            weight = float(np.sqrt(orders.stages.variance[stage] / parts[stage]))
            for piece in range(parts[stage]):
                ends = (piece / parts[stage], (piece + 1) / parts[stage])
                line.append((leader, *(ends if moves else (1.0, 1.0)), weight))
        lines.append(line)
    length = max(len(line) for line in lines)
    table = np.array([line + [(AFTER, 0.0, 0.0, 0.0)] * (length - len(line)) for line in lines])
    return table[:, :, 0].astype(np.int64), table[:, :, 1], table[:, :, 2], table[:, :, 3]


def random_list(
    seed: int,
    *,
    names: int,
    buckets: int,
    factors: int = 2,
    uneven: bool = False,
    **fixed: Any,
) -> Linked:
    """Names of 0.01 to 10 % of ADV on both sides, factors carrying half of their variance.

    With `uneven`, names begin and end at different times, their buckets take one to three
    intervals, and some stages cannot trade.
    """
    rng = np.random.default_rng(seed)
    orders = []
    for _ in range(names):
        size = int(rng.integers(max(1, buckets // 2), buckets + 1)) if uneven else buckets
        volume = rng.uniform(0.2, 1.0, size)
        volume /= volume.sum()
        chosen: dict[str, Any] = {
            "quantity": 1e6 * 10.0 ** rng.uniform(-4.0, -1.0),
            "participation": 0.25,
            "share": 0.8 * volume,
            "charge": 0.01,
            "price": rng.uniform(5.0, 200.0),
            "vol": rng.uniform(0.01, 0.04),
        } | fixed
        closed = uneven & (rng.random(size) < 0.15)
        closed[[0, -1]] = False
        made = order(np.where(closed, 0.0, volume), is_open=~closed, **chosen)
        most = 0.8 * float(made.cap.sum())
        orders.append(replace(made, quantity=np.minimum(made.quantity, most)))
    batch = join(orders)
    directions = rng.standard_normal((names, factors))
    directions /= np.sqrt((directions**2).sum(axis=1, keepdims=True)) if factors else 1.0
    return linked(
        batch,
        np.sqrt(0.5) * batch.market.vol[:, None] * directions,
        side=rng.choice([-1, 1], names).tolist(),
        wait=rng.integers(0, 4, names).tolist() if uneven else None,
        pieces=rng.integers(1, 4, batch.stages.layout.entries).tolist() if uneven else None,
    )


def feasible_fractions(problem: Problem, seed: int, first: float = 0.0) -> Array:
    """Random fractions strictly within the caps; at least `first` in every first bucket."""
    rng = np.random.default_rng(seed)
    layout, owner = problem.layout, problem.layout.owner
    wanted = rng.uniform(0.1, 1.0, layout.entries)
    wanted /= layout.sum(wanted)[owner]
    if first:
        wanted *= 1.0 - first
        wanted[layout.first] += first
    cap = np.minimum(problem.cap, 2.0)
    y = np.minimum(wanted, 0.95 * cap)
    missing = 1.0 - layout.sum(y)
    room = cap - y
    result: Array = y + (missing / layout.sum(room))[owner] * room
    assert (result <= problem.cap).all()
    return result


def corridors_around(
    listed: Linked, fractions: Array, count: int, width: float, seed: int, every: float = 0.7
) -> Linked:
    """`count` corridors of `width` times the gross about what these fractions give.

    The first is the net, the second the gross, others are of random weights; a part `every` of the
    bounds is there. Where nobody can move a level, it has none.
    """
    rng = np.random.default_rng(seed)
    notional = listed.orders.market.price * listed.orders.quantity / listed.unit
    sign = rng.choice([-1.0, 1.0], len(notional))
    rows = np.stack(
        [
            notional * (sign if row == 0 else 1.0 if row == 1 else rng.normal(0.0, 1.0, len(sign)))
            for row in range(count)
        ]
    )
    open_ended = np.full((count, listed.coupling.bucket.shape[1]), np.inf)
    level = levels(listed.within(rows, -open_ended, open_ended), fractions)
    off = rng.uniform(0.1, 0.9, level.shape) * width * listed.gross
    movable = _movable(listed)
    lower = np.where((rng.random(level.shape) < every) & movable, level - off, -np.inf)
    upper = np.where(
        (rng.random(level.shape) < every) & movable, level - off + width * listed.gross, np.inf
    )
    return listed.within(rows, lower, upper)


def _movable(listed: Linked) -> Any:
    """(T,) whether some name is neither waiting nor done at the end of the interval."""
    coupling, last = listed.coupling, listed.problem.layout.last[:, None]
    still = (coupling.bucket < 0) | ((coupling.bucket == last) & (coupling.end >= 1.0))
    return ~still.all(axis=0)


# by plain loops, sharing nothing with the solver


def left(listed: Linked, fractions: Any) -> tuple[Any, Any]:
    """(N, T) x at both ends of every interval; fractions may be complex."""
    coupling, layout = listed.coupling, listed.problem.layout
    begin = np.ones(coupling.bucket.shape, dtype=np.asarray(fractions).dtype)
    end = begin.copy()
    for name in range(coupling.bucket.shape[0]):
        for interval, bucket in enumerate(coupling.bucket[name]):
            if bucket == AFTER:
                begin[name, interval] = end[name, interval] = 0.0
            elif bucket != BEFORE:
                before = 1.0 - sum(fractions[layout.first[name] : bucket])
                done = coupling.begin[name, interval], coupling.end[name, interval]
                begin[name, interval] = before - done[0] * fractions[bucket]
                end[name, interval] = before - done[1] * fractions[bucket]
    return begin, end


def levels(listed: Linked, fractions: Array) -> Array:
    """(R, T) corridor levels at the end of every interval."""
    coupling = listed.coupling
    result: Array = coupling.rows @ left(listed, fractions)[1] + coupling.constant[:, None]
    return result


def factor_variance(listed: Linked, fractions: Any) -> Any:
    """sum_kc int f_kc(u)^2 du, by Simpson's rule: exact, f is linear."""
    begin, end = left(listed, fractions)
    loads, weight = listed.coupling.loadings, listed.coupling.weight
    square = [((loads.T @ (weight * x)) ** 2).sum() for x in (begin, (begin + end) / 2.0, end)]
    return (square[0] + 4.0 * square[1] + square[2]) / 6.0


def total(listed: Linked, fractions: Any) -> tuple[Any, Any]:
    """Cost and variance of the whole list, in units."""
    layout = listed.problem.layout
    cost, risk = 0.0, factor_variance(listed, fractions)
    for name in range(len(layout.size)):
        own = fractions[layout.first[name] : layout.last[name] + 1]
        its_cost, its_risk = cost_and_risk(listed.problem.take(np.array([name])), own)
        cost, risk = cost + its_cost, risk + its_risk
    return cost, risk


def objective(
    listed: Linked, fractions: Array, urgency: float = 0.0, risk_aversion: float = 0.0
) -> float:
    """C + U sqrt(R) + lambda R."""
    cost, risk = total(listed, fractions)
    return float(cost + urgency * np.sqrt(risk) + risk_aversion * risk)


def gradient(
    listed: Linked, fractions: Array, urgency: float = 0.0, risk_aversion: float = 0.0
) -> Array:
    """By complex steps: exact to rounding."""
    result = np.empty(len(fractions))
    for bucket in range(len(fractions)):
        step = fractions.astype(complex)
        step[bucket] += 1e-30j
        cost, risk = total(listed, step)
        result[bucket] = (cost + urgency * np.sqrt(risk) + risk_aversion * risk).imag / 1e-30
    return result


def level_matrix(listed: Linked) -> tuple[Array, Array]:
    """(n, M) and (n,): the limited levels are matrix @ fractions + constant."""
    at, count = listed.coupling.limited, listed.problem.layout.entries
    constant = levels(listed, np.zeros(count))[at]
    columns = [levels(listed, unit)[at] - constant for unit in np.eye(count)]
    return np.array(columns).T.reshape(len(constant), count), constant


def relative_gap(
    listed: Linked,
    fractions: Array,
    lower_price: Array,
    upper_price: Array,
    *,
    urgency: float = 0.0,
    risk_aversion: float = 0.0,
) -> float:
    """G'y - min G'v with the corridors priced in, relative to impact plus lambda Var."""
    layout, problem, coupling = listed.problem.layout, listed.problem, listed.coupling
    lower, upper = coupling.bounds
    low, high = (
        np.where(np.isfinite(bound), price, 0.0)
        for bound, price in ((lower, lower_price), (upper, upper_price))
    )
    matrix, constant = level_matrix(listed)
    level = matrix @ fractions + constant
    slope = gradient(listed, fractions, urgency, risk_aversion) + (high - low) @ matrix
    gap = float(slope @ fractions)
    gap += float((low * (level - np.where(np.isfinite(lower), lower, 0.0))).sum())
    gap += float((high * (np.where(np.isfinite(upper), upper, 0.0) - level)).sum())
    for name in range(len(layout.size)):
        own = slice(layout.first[name], layout.last[name] + 1)
        gap -= least_linear(slope[own], problem.cap[own])
    cost, risk = total(listed, fractions)
    implied = urgency / (2.0 * np.sqrt(risk)) if risk > 0.0 else 0.0
    impact = cost - problem.constant_cost.sum() - problem.charge @ fractions
    return gap / float(impact + (risk_aversion + implied) * risk)
