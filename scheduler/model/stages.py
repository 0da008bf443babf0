"""What the model's functions are given: market parameters per order, stages in time order."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from scheduler.model.quadrature import nodes, plain, rooted
from scheduler.model.ragged import Array, Index, Ragged

_FIGURE_NODES = 8


@dataclass(frozen=True)
class Market:
    """Market parameters, one entry an order.

    price p (base currency a share); adv (shares a session); vol, observed close-to-close sigma
    (fraction per sqrt day); level_rate nu; relaxation r (sessions of volume); coefficient k and
    exponent delta of the impact law; feedback phi; permanent gamma.
    """

    price: Array
    adv: Array
    vol: Array
    level_rate: Array
    relaxation: Array
    coefficient: Array
    exponent: Array
    feedback: Array
    permanent: Array

    @property
    def ground_vol(self) -> Array:
        """sigma_0 = sigma / sqrt(1 + 2 nu) [Orrell 2020]."""
        return self.vol / np.sqrt(1.0 + 2.0 * self.level_rate)

    @property
    def relaxation_volume(self) -> Array:
        """L = r ADV, shares."""
        return self.relaxation * self.adv

    def scaled(self, volume: float = 1.0, volatility: float = 1.0) -> Market:
        """The market with all its volume, or volatility, multiplied."""
        return replace(self, adv=self.adv * volume, vol=self.vol * volatility)

    def take(self, orders: Index) -> Market:
        return Market(**{name: value[orders] for name, value in vars(self).items()})


@dataclass(frozen=True)
class Stages:
    """Buckets and closed periods of all orders, laid end to end.

    theta : (M,) V_t/L of a bucket, omega/r of a closed period between sessions.
    variance : (M,) share h of one day's variance.
    open : (M,) whether there is trading, so that imbalance feeds volatility.
    session : (M,) session each stage counts in, from 0 within each order.
    """

    layout: Ragged
    theta: Array
    variance: Array
    open: NDArray[np.bool_]
    session: Index

    @cached_property
    def nodes(self) -> tuple[Array, Array]:
        """Quadrature of the reported figures, finer than any solver's."""
        return nodes(self.theta, fewest=_FIGURE_NODES)

    def split_nodes(self, before: Array, shares: Array) -> Iterator[tuple[int, Array, Array]]:
        """Stages in which Z changes sign, each with nodes that meet at the crossing.

        Z = Z_inf + (Z_start - Z_inf) e^{-theta u}, Z_inf = q/theta, vanishes where
        e^{theta u} = 1 - Z_start theta / q.
        """
        with np.errstate(divide="ignore", invalid="ignore"):
            at_zero = np.where(
                self.theta > 0.0,
                np.log1p(-before * self.theta / shares) / self.theta,
                -before / shares,
            )
        for m in np.flatnonzero((before < 0.0) & (shares > 0.0) & (at_zero < 1.0)):
            cut = float(at_zero[m])
            behind, w_behind = _toward(cut, float(self.theta[m]))
            ahead, w_ahead = nodes(self.theta[m : m + 1] * (1.0 - cut), _FIGURE_NODES)
            fraction = np.concatenate((behind, cut + (1.0 - cut) * ahead[:, 0]))
            yield int(m), fraction, np.concatenate((w_behind, (1.0 - cut) * w_ahead[:, 0]))

    def take(self, orders: Index) -> Stages:
        layout, at = self.layout.take(orders)
        return Stages(layout, self.theta[at], self.variance[at], self.open[at], self.session[at])


def _toward(cut: float, theta: float) -> tuple[Array, Array]:
    """Nodes on [0, cut] for a path that vanishes at the cut, in pieces of theta u <= 2."""
    pieces = max(1, int(np.ceil(theta * cut / 2.0)))
    length = cut / pieces
    root, root_weight = rooted(_FIGURE_NODES)
    point, weight = plain(_FIGURE_NODES)
    fractions = [cut - length * root]
    fractions += [cut - length * (piece + point) for piece in range(1, pieces)]
    weights = [root_weight] + [weight] * (pieces - 1)
    return np.concatenate(fractions), length * np.concatenate(weights)
