"""The arrays handed to a solver: free buckets only, in fractions of the order and units of impact.

`Orders` is the task in the model's units. `assemble` turns it into a `Problem`: buckets that
cannot trade (closed periods, cap 0) are folded into the bucket before them, quantities become
fractions y = q/Q, x = remaining/Q, z = Z/Q, and money is divided by c Q^{1+delta}. `shares`
is the exact undo. In bucket t, with a, b the decay and gain through it and what is folded into it,

    x_t = x_{t-1} - y_t,   z_t = a_t z_{t-1} + b_t y_t,

and cost C and variance R are sums over quadrature nodes j, affine in the state before the bucket:

    z_j = al_j z_{t-1} + be_j y_t,   x_j = x_{t-1} - u_j y_t,
    C = const + sum_t l_t y_t + sum_j wi_j |z_j|^{1+delta},
    R = const + sum_j x_j^2 (wr_j + wf_j |z_j|).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from functools import cached_property
from typing import Any

import numpy as np

from scheduler.model.impact import displacement, impact_scale
from scheduler.model.pools import Pools
from scheduler.model.quadrature import nodes
from scheduler.model.ragged import Array, Index, Ragged
from scheduler.model.stages import Market, Stages
from scheduler.model.state import build_up, faded, reach_back_short

_SIGNED_NODES = 16  # a change of sign between nodes costs accuracy


@dataclass(frozen=True)
class Row:
    """lower <= sum_k coefficients_k * (shares of stage buckets_k) <= upper.

    `buckets` are stages counted through all orders; a stage that cannot trade counts as 0. An
    infinite bound is none.
    """

    name: str
    buckets: Index
    coefficients: Array
    lower: float
    upper: float

    def excess(self, shares: Array) -> float:
        """How far slices (M,) are from keeping the row, in its own units."""
        level = float(self.coefficients @ shares[self.buckets])
        return max(self.lower - level, level - self.upper, 0.0)


@dataclass(frozen=True)
class Orders:
    """Independent parent orders: N of them, M stages in all.

    quantity : (N,) shares Q > 0.
    initial : (N,) imbalance Z_0 at time zero, shares, signed in the order's own direction.
    cap : (M,) most shares of each stage; inf = none, 0 = no trading.
    charge : (M,) spread and fees, currency a share.
    ceiling : (M,) most shares left after each stage; inf = none.
    urgency, risk_aversion : (N,) U, and lambda in 1/currency; C + U sqrt(Var) + lambda Var.
    specific : (N,) share of a name's variance that no common factor carries; 1 for orders
    planned alone.
    residual : (N,) shares beyond the quantity that are held to the end and never trade.
    pools : which orders share one impact state; None where each has its own.
    rows : further linear limits; only the conic solver keeps them.
    """

    stages: Stages
    market: Market
    quantity: Array
    initial: Array
    cap: Array
    charge: Array
    ceiling: Array
    urgency: Array
    risk_aversion: Array
    specific: Array | float = 1.0
    residual: Array | float = 0.0
    pools: Pools | None = None
    rows: tuple[Row, ...] = ()

    def __len__(self) -> int:
        return len(self.quantity)

    def take(self, orders: Index) -> Orders:
        """Some of the orders, each with a state of its own."""
        _, at = self.stages.layout.take(orders)
        return Orders(
            self.stages.take(orders),
            self.market.take(orders),
            self.quantity[orders],
            self.initial[orders],
            self.cap[at],
            self.charge[at],
            self.ceiling[at],
            self.urgency[orders],
            self.risk_aversion[orders],
            self.specific if isinstance(self.specific, float) else self.specific[orders],
            self.residual if isinstance(self.residual, float) else self.residual[orders],
            rows=_rows_within(self.rows, at, self.stages.layout.entries),
        )

    @cached_property
    def pooled(self) -> Orders:
        """The same with every pool as one order: quantities add up, the loosest cap is the pool's.

        A pool has left at most what its orders may have left together.
        """
        pools = self.pools
        if pools is None:
            return self
        quantity = self.quantity[self.stages.layout.owner]
        ceiling = pools.by_stage(np.minimum(self.ceiling, quantity))
        ceilings = pools.by_stage(np.where(np.isfinite(self.ceiling), 1.0, 0.0))
        return replace(
            self.take(pools.lead),
            quantity=pools.by_pool(self.quantity),
            cap=pools.most_by_stage(self.cap),
            ceiling=np.where(ceilings > 0.0, ceiling, np.inf),
        )

    def asking(self, urgency: Array, risk_aversion: Array) -> Orders:
        """The same orders with another aim."""
        return replace(self, urgency=urgency, risk_aversion=risk_aversion)

    @classmethod
    def stack(cls, parts: Sequence[Orders]) -> Orders:
        """Several batches of orders planned alone, laid end to end."""
        stages, markets = [part.stages for part in parts], [part.market for part in parts]
        layout = Ragged(np.concatenate([part.layout.size for part in stages]))
        return cls(Stages(layout, **_joined(stages)), Market(**_joined(markets)), **_joined(parts))


def _joined(parts: Sequence[Any]) -> dict[str, Any]:
    """The array fields of dataclasses alike, laid end to end."""
    names = [item.name for item in fields(parts[0])]
    return {
        name: np.concatenate([getattr(part, name) for part in parts])
        for name in names
        if isinstance(getattr(parts[0], name), np.ndarray)
    }


@dataclass(frozen=True)
class Problem:
    """N orders, M free buckets in all, J nodes a bucket; see the module's formulas.

    x counts what trades; the variance sees x + residual, residual (N,) of what never does.
    kappa_t = 1 - b_t rho_{t+1}, rho = theta/(e^theta - 1) of the next bucket, and 1 for an
    order's last: the coefficient of the flat output (`scheduler.solve.flat`). `rows` speak of
    stages, as `bucket` does.
    """

    layout: Ragged
    bucket: Index
    theta: Array
    decay: Array
    gain: Array
    kappa: Array
    node_decay: Array
    node_gain: Array
    node_share: Array
    impact_weight: Array
    risk_weight: Array
    feedback_weight: Array
    charge: Array
    cap: Array
    ceiling: Array
    exponent: Array
    initial: Array
    constant_cost: Array
    constant_risk: Array
    urgency: Array
    risk_aversion: Array
    quantity: Array
    scale: Array
    residual: Array
    rows: tuple[Row, ...] = ()

    @cached_property
    def signed(self) -> bool:
        """Whether the imbalance of some order can be negative."""
        return bool((self.initial < 0.0).any())

    def shares(self, fractions: Array, stages: int) -> Array:
        """The slices of all stages, in shares, from the fractions of the free buckets."""
        result = np.zeros(stages)
        result[self.bucket] = fractions * self.quantity[self.layout.owner]
        return result

    def fractions(self, shares: Array) -> Array:
        """Fractions of the free buckets from the slices of all stages."""
        return shares[self.bucket] / self.quantity[self.layout.owner]

    def in_unit(self, unit: float) -> Problem:
        """The same with the money of every order in one unit, so that orders can be added."""
        factor = self.scale / unit
        by_bucket = factor[self.layout.owner]
        return replace(
            self,
            impact_weight=self.impact_weight * by_bucket,
            risk_weight=self.risk_weight * by_bucket**2,
            feedback_weight=self.feedback_weight * by_bucket**2,
            charge=self.charge * by_bucket,
            constant_cost=self.constant_cost * factor,
            constant_risk=self.constant_risk * factor**2,
            risk_aversion=self.risk_aversion / factor,
            scale=np.full_like(self.scale, unit),
        )

    def take(self, orders: Index) -> Problem:
        layout, at = self.layout.take(orders)
        picked: dict[str, Any] = {"layout": layout, "rows": self.rows}
        for item in fields(self)[1:-1]:
            value = getattr(self, item.name)
            picked[item.name] = value[orders] if item.name in _PER_ORDER else value[..., at]
        return Problem(**picked)


_PER_ORDER = {
    "exponent",
    "initial",
    "constant_cost",
    "constant_risk",
    "urgency",
    "risk_aversion",
    "quantity",
    "scale",
    "residual",
}


def assemble(orders: Orders) -> Problem:
    """Fold, scale and place the nodes; every order needs at least one bucket that can trade."""
    stages, market = orders.stages, orders.market
    owner = stages.layout.owner
    free = np.flatnonzero(orders.cap > 0.0)
    layout = Ragged(np.bincount(owner[free], minlength=len(orders)))
    fold = _Folding(stages, market, free, layout)
    theta, holder = stages.theta[free], layout.owner
    scale = impact_scale(market) * orders.quantity ** (1.0 + market.exponent)
    own_gain, passive = build_up(theta), np.exp(-fold.theta)
    short = faded(theta) + own_gain * -np.expm1(-fold.theta)  # 1 - b
    next_short = np.append(reach_back_short(theta)[1:], 1.0)
    next_short[layout.last] = 1.0
    share, weights = _nodes(theta, bool((orders.initial < 0.0).any()))
    time = theta * share
    grown = np.where(theta > 0.0, -np.expm1(-time) / np.where(theta > 0.0, theta, 1.0), share)
    risk_unit, feedback_unit = _risk_units(orders, scale)
    variance = stages.variance[free]
    end = np.ones((1, len(free)))
    prologue, risk_prologue = fold.prologue(orders, scale, risk_unit, feedback_unit)
    return Problem(
        layout=layout,
        bucket=free,
        theta=theta,
        decay=np.exp(-theta) * passive,
        gain=own_gain * passive,
        kappa=short + next_short - short * next_short,
        node_decay=np.concatenate((np.exp(-time), np.exp(-theta)[None])),
        node_gain=np.concatenate((grown, own_gain[None])),
        node_share=np.concatenate((np.broadcast_to(share, time.shape), end)),
        impact_weight=np.concatenate((weights * theta, fold.impact[None])),
        risk_weight=risk_unit[holder] * np.concatenate((weights * variance, fold.risk[None])),
        feedback_weight=feedback_unit[holder]
        * np.concatenate(
            (weights * np.where(stages.open, stages.variance, 0.0)[free], fold.feedback[None])
        ),
        charge=(orders.charge[free]) * (orders.quantity / scale)[holder],
        cap=orders.cap[free] / orders.quantity[holder],
        ceiling=fold.lowest(orders.ceiling) / orders.quantity[holder],
        exponent=market.exponent,
        initial=fold.initial(orders.initial) / orders.quantity,
        constant_cost=prologue,
        constant_risk=risk_prologue,
        urgency=orders.urgency,
        risk_aversion=orders.risk_aversion * scale,
        quantity=orders.quantity,
        scale=scale,
        residual=np.broadcast_to(orders.residual / orders.quantity, len(orders)).copy(),
        rows=orders.rows,
    )


def _rows_within(rows: tuple[Row, ...], kept: Index, stages: int) -> tuple[Row, ...]:
    """The rows that speak of none but the stages `kept`, which are counted anew."""
    if not rows:
        return ()
    place = np.full(stages, -1)
    place[kept] = np.arange(len(kept))
    moved = (replace(row, buckets=place[row.buckets]) for row in rows)
    return tuple(row for row in moved if (row.buckets >= 0).all())


def _nodes(theta: Array, signed: bool) -> tuple[Array, Array]:
    share, weight = nodes(theta, fewest=_SIGNED_NODES if signed else 4)
    shape = (len(share), len(theta))
    return np.broadcast_to(share, shape), np.broadcast_to(weight, shape)


def _risk_units(orders: Orders, scale: Array) -> tuple[Array, Array]:
    """p^2 Q^2 sigma^2, its specific part, and p^2 Q^3 phi sigma_0^2 / L, in units of scale^2."""
    market = orders.market
    square = (market.price * orders.quantity / scale) ** 2
    strength = market.feedback * market.ground_vol**2 / market.relaxation_volume
    return square * market.vol**2 * orders.specific, square * strength * orders.quantity


class _Folding:
    """What the stages that cannot trade add to the free bucket before them.

    Through such stages Z falls by pure decay and x stands still, so each of their integrals is
    exact at one node, the free bucket's end: with Theta their total relaxation, the impact part
    sums to (1 - e^{-(1+delta) Theta})/(1+delta), and the final |Z|^{1+delta}/(1+delta) completes it
    to 1/(1+delta) in an order's last bucket.
    """

    def __init__(self, stages: Stages, market: Market, free: Index, layout: Ragged) -> None:
        self.stages = stages
        self.market = market
        self.layout = layout
        owner = stages.layout.owner
        leader = np.cumsum(np.isin(np.arange(len(owner)), free)) - 1  # free bucket at or before
        before_first = leader < layout.first[owner]
        passive = np.ones(len(owner), dtype=bool)
        passive[free] = False
        self.group = np.where(before_first, -1, leader)
        self.passive = passive
        self.follows = np.flatnonzero(passive & ~before_first)
        self.leads = np.flatnonzero(before_first)
        gone = np.where(passive, stages.theta, 0.0)
        elapsed = stages.layout.cumsum(gone)
        self.since = elapsed - gone  # relaxation by passive stages since the order's start
        base = elapsed[free]
        buckets = len(free)
        group, follows = self.group[self.follows], self.follows
        power = 1.0 + market.exponent
        self.theta = np.bincount(group, gone[follows], minlength=buckets)
        faded_by = np.exp(-(self.since[follows] - base[group]))
        self.risk = np.bincount(group, stages.variance[follows], minlength=buckets)
        mean_level = faded_by * build_up(stages.theta[follows])
        open_variance = np.where(stages.open, stages.variance, 0.0)[follows]
        self.feedback = np.bincount(group, open_variance * mean_level, minlength=buckets)
        exponent = power[layout.owner]
        self.impact = -np.expm1(-exponent * self.theta) / exponent
        self.impact[layout.last] = 1.0 / power

    def initial(self, imbalance: Array) -> Array:
        """Z at the start of the first free bucket."""
        leads = np.bincount(
            self.stages.layout.owner[self.leads],
            self.stages.theta[self.leads],
            minlength=len(imbalance),
        )
        result: Array = imbalance * np.exp(-leads)
        return result

    def lowest(self, ceiling: Array) -> Array:
        """Least ceiling on x over each free bucket and what is folded into it."""
        result = np.full(self.layout.entries, np.inf)
        inside = self.group >= 0
        np.minimum.at(result, self.group[inside], ceiling[inside])
        return result

    def prologue(
        self, orders: Orders, scale: Array, risk_unit: Array, feedback_unit: Array
    ) -> tuple[Array, Array]:
        """Constants of C and R: the stages before the first free bucket, and the arrival price."""
        stages, market, count = self.stages, self.market, len(orders)
        power = 1.0 + market.exponent
        start = np.abs(orders.initial / orders.quantity)
        at_first = np.abs(self.initial(orders.initial)) / orders.quantity
        arrival = market.price * displacement(market, orders.initial) * orders.quantity / scale
        # -|z_0|^{1+delta}/(1+delta), plus what pure decay up to the first bucket takes from it
        cost = -(at_first**power) / power - arrival
        who = stages.layout.owner[self.leads]
        level = np.exp(-self.since[self.leads]) * build_up(stages.theta[self.leads])
        variance = stages.variance[self.leads]
        fed = np.where(stages.open[self.leads], variance, 0.0) * level
        risk = risk_unit * np.bincount(who, variance, minlength=count)
        risk += feedback_unit * start * np.bincount(who, fed, minlength=count)
        held: Array = risk * (1.0 + orders.residual / orders.quantity) ** 2
        return cost, held
