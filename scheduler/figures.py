"""Cost and risk of given slices: every figure of a plan, for whole lists at once."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from scheduler.model.impact import block_cost, displacement, impact_cost, permanent_cost
from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Array, Index
from scheduler.model.risk import variance
from scheduler.model.state import imbalance
from scheduler.problem import Orders

QUANTILES = (0.05, 0.25, 0.50, 0.75, 0.95, 0.99)
_TAIL = 0.95


@dataclass(frozen=True)
class Charges:
    """What each stage costs beside impact, (M,) base currency a share."""

    spread: Array
    fees: Array


@dataclass(frozen=True)
class Figures:
    """Cost and risk of slices, base currency; arrays by order (N,) or stage (M,).

    `residual` is what the slices leave of the quantity; its price as one block at the end is
    `residual_cost`, never part of `expected_cost`.

    Orders of a pool share its imbalance: at every stage all trade at the same average price, and
    a pool's cost is theirs by what they trade.
    """

    orders: Orders
    charges: Charges
    shares: Array

    @cached_property
    def pooled(self) -> Figures:
        """The same with every pool as one order."""
        pools = self.orders.pools
        if pools is None:
            return self
        lead = pools.lead_stages
        charges = Charges(self.charges.spread[lead], self.charges.fees[lead])
        return Figures(self.orders.pooled, charges, pools.by_stage(self.shares))

    def by_order(self, values: Array) -> Array:
        """(N,) what each order's pool has, from what pools have."""
        pools = self.orders.pools
        return values if pools is None else values[pools.of]

    @cached_property
    def flow(self) -> Array:
        """(M,) what trades at each stage in all orders that share the state."""
        pools = self.orders.pools
        return self.shares if pools is None else self.pooled.shares[pools.place]

    @cached_property
    def traded(self) -> Array:
        return self.orders.stages.layout.sum(self.shares)

    @cached_property
    def residual(self) -> Array:
        left = self.orders.quantity - self.traded
        return np.where(left > 1e-9 * self.orders.quantity, left, 0.0)

    @cached_property
    def notional(self) -> Array:
        result: Array = self.orders.quantity * self.orders.market.price
        return result

    @cached_property
    def cost_bps(self) -> Array:
        """Expected cost in basis points of what trades; 0 where nothing does."""
        value = self.traded * self.orders.market.price
        traded = np.where(value > 0.0, value, 1.0)
        return np.where(value > 0.0, 1e4 * self.expected_cost / traded, 0.0)

    @cached_property
    def stage_impact(self) -> Array:
        orders = self.orders
        if orders.pools is not None:
            shared = self.pooled.stage_impact[orders.pools.place]
            return shared * _part(self.shares, self.flow)
        return impact_cost(orders.stages, orders.market, self.shares, orders.initial)

    @cached_property
    def stage_cost(self) -> Array:
        """Expected cost of each stage; adds up to `expected_cost`."""
        charges = (self.charges.spread + self.charges.fees) * self.shares
        part = _part(self.shares, self.traded[self.orders.stages.layout.owner])
        lasting = part * self.permanent[self.orders.stages.layout.owner]
        result: Array = self.stage_impact + charges + lasting
        return result

    @cached_property
    def impact(self) -> Array:
        return self.orders.stages.layout.sum(self.stage_impact)

    @cached_property
    def spread(self) -> Array:
        return self.orders.stages.layout.sum(self.charges.spread * self.shares)

    @cached_property
    def fees(self) -> Array:
        return self.orders.stages.layout.sum(self.charges.fees * self.shares)

    @cached_property
    def permanent(self) -> Array:
        pools = self.orders.pools
        if pools is not None:
            shared, traded = self.pooled.permanent[pools.of], self.pooled.traded[pools.of]
            return shared * _part(self.traded, traded)
        lasting = permanent_cost(self.orders.market, self.orders.quantity)
        result: Array = lasting * self.traded / self.orders.quantity
        return result

    @cached_property
    def expected_cost(self) -> Array:
        result: Array = self.impact + self.spread + self.fees + self.permanent
        return result

    @cached_property
    def residual_cost(self) -> Array:
        """The residual as one block after the last stage, against the arrival price."""
        pools = self.orders.pools
        if pools is not None:
            shared, left = self.pooled.residual_cost[pools.of], self.pooled.residual[pools.of]
            return shared * _part(self.residual, left)
        orders, market, layout = self.orders, self.orders.market, self.orders.stages.layout
        _, after = imbalance(layout, orders.stages.theta, self.shares, orders.initial)
        block = block_cost(market, after[layout.last], self.residual)
        arrival = market.price * displacement(market, orders.initial) * self.residual
        charge = layout.max(self.charges.spread) + layout.max(self.charges.fees)
        lasting = permanent_cost(market, orders.quantity) * self.residual / orders.quantity
        return np.where(
            self.residual > 0.0, block - arrival + charge * self.residual + lasting, 0.0
        )

    @cached_property
    def stage_variance(self) -> tuple[Array, Array]:
        """Variance of each stage: energy levels at their mean, and own imbalance."""
        orders = self.orders
        return variance(
            orders.stages, orders.market, orders.quantity, self.shares, orders.initial, self.flow
        )

    @cached_property
    def cost_std(self) -> Array:
        base, own = self.stage_variance
        result: Array = np.sqrt(self.orders.stages.layout.sum(base + own))
        return result

    @cached_property
    def stage_std_remaining(self) -> Array:
        """Standard deviation of the cost from the end of each stage on, (M,)."""
        layout = self.orders.stages.layout
        base, own = self.stage_variance
        total = base + own
        later = layout.sum(total)[layout.owner] - layout.cumsum(total)
        result: Array = np.sqrt(np.maximum(later, 0.0))
        return result

    @cached_property
    def objective(self) -> Array:
        """C + U sqrt(Var) + lambda Var."""
        orders, std = self.orders, self.cost_std
        result: Array = self.expected_cost + orders.urgency * std + orders.risk_aversion * std**2
        return result

    @cached_property
    def quantiles(self) -> Array:
        """Quantiles of the cost at `QUANTILES` and the expected shortfall at 95 %, (7, N)."""
        result = np.empty((len(QUANTILES) + 1, len(self.orders)))
        for which, part in self._distributions():
            rows = [part.quantile(p) for p in QUANTILES]
            result[:, which] = np.array([*rows, part.expected_shortfall(_TAIL)])
        return result

    def shortfall(self, *, most_sessions: int) -> Array:
        """Expected shortfall of the cost at 95 %, (N,); nan for orders of more sessions."""
        result = np.full(len(self.orders), np.nan)
        for which, part in self._distributions():
            if len(part.base) <= most_sessions:
                result[which] = part.expected_shortfall(_TAIL)
        return result

    def chance_below(self, cost: Array) -> Array:
        """P(cost <= given) of each order, (N,)."""
        result = np.empty(len(self.orders))
        for which, part in self._distributions():
            result[which] = part.cdf(cost[which])
        return result

    def _distributions(self) -> Iterator[tuple[Index, CostDistribution]]:
        """Distributions of the cost, of orders over equally many sessions together."""
        sessions = self.orders.stages.layout.max(self.orders.stages.session.astype(float)) + 1
        for count in np.unique(sessions):
            which = np.flatnonzero(sessions == count)
            yield which, self._distribution(which, int(count))

    def distribution(self, order: int) -> CostDistribution:
        """The distribution of one order's cost."""
        layout = self.orders.stages.layout
        span = slice(layout.first[order], layout.last[order] + 1)
        sessions = int(self.orders.stages.session[span].max()) + 1
        return self._distribution(np.array([order]), sessions)

    def _distribution(self, which: Index, sessions: int) -> CostDistribution:
        layout = self.orders.stages.layout
        part, at = layout.take(which)
        session = self.orders.stages.session[at]
        base, own = (np.zeros((sessions, len(which))) for _ in range(2))
        for by_session, value in zip((base, own), self.stage_variance, strict=True):
            np.add.at(by_session, (session, part.owner), value[at])
        rate = self.orders.market.level_rate[which]
        return CostDistribution(self.expected_cost[which], base, own, rate)


def _part(own: Array, total: Array) -> Array:
    """own / total, 0 of nothing."""
    result: Array = own / np.where(total > 0.0, total, 1.0)
    return result
