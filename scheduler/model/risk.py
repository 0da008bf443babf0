"""Variance of the cost: ground variance, energy levels and the order's own imbalance.

While there is trading the variance rate is sigma_0^2 (1 + 2 nu + phi |Z|/L): own trading makes the
market it trades in more volatile. In a closed period the last part is absent. x(u) is what is
still to trade; it falls linearly within a bucket.
"""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array, Ragged
from scheduler.model.stages import Market, Stages
from scheduler.model.state import imbalance, imbalance_at


def remaining(layout: Ragged, quantity: Array, shares: Array) -> tuple[Array, Array]:
    """Shares still to trade before and after each stage, (M,)."""
    after = quantity[layout.owner] - layout.cumsum(shares)
    return layout.before(after, quantity), after


def variance(
    stages: Stages,
    market: Market,
    quantity: Array,
    shares: Array,
    initial: Array,
    flow: Array | None = None,
) -> tuple[Array, Array]:
    """Variance of the cost from each stage, currency squared.

    Parameters
    ----------
    flow : (M,) what builds up the imbalance, where orders share it; default their own shares.

    Returns
    -------
    base : (M,) p^2 sigma^2 h int x^2 du, energy levels at their mean.
    own : (M,) p^2 phi sigma_0^2 h int x^2 |Z|/L du, from the order's imbalance and the reading.
    """
    owner = stages.layout.owner
    flow = shares if flow is None else flow
    left, _ = remaining(stages.layout, quantity, shares)
    before, _ = imbalance(stages.layout, stages.theta, flow, initial)
    price_square = market.price[owner] ** 2 * stages.variance
    square = left * left - left * shares + shares * shares / 3.0
    base = price_square * market.vol[owner] ** 2 * square
    strength = (market.feedback * market.ground_vol**2 / market.relaxation_volume)[owner]
    weighted = _integral_of_feedback(stages, left, shares, before, flow)
    return base, np.where(stages.open, price_square * strength * weighted, 0.0)


def _integral_of_feedback(
    stages: Stages, left: Array, shares: Array, before: Array, flow: Array
) -> Array:
    """int_0^1 x(u)^2 |Z(u)| du over each stage, cut where Z changes sign."""
    fraction, weight = stages.nodes
    path = np.abs(imbalance_at(fraction, stages.theta, before, flow))
    total: Array = (weight * (left - fraction * shares) ** 2 * path).sum(axis=0)
    for m, u, w in stages.split_nodes(before, flow):
        path = np.abs(imbalance_at(u[:, None], stages.theta[m : m + 1], before[m], flow[m]))
        total[m] = w @ ((left[m] - u * shares[m]) ** 2 * path[:, 0])
    return total
