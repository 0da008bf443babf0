"""Price displacement and the expected cost of impact.

The displacement is D(Z) = k sigma_0 sgn(Z) (|Z|/ADV)^delta, a fraction of price [Orrell 2020 for
k = sqrt 2, delta = 1/2]. Since dq = dZ + Z dV/L, the cost of trading q in a stage is

    int D dq = (c/p) { [|Z|^{1+delta}]_start^end / (1+delta) + theta int_0^1 |Z|^{1+delta} du },

c = p k sigma_0 ADV^{-delta}, with nothing traded in a closed period.
"""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array
from scheduler.model.stages import Market, Stages
from scheduler.model.state import imbalance, imbalance_at


def displacement(market: Market, imbalance_shares: Array) -> Array:
    """D(Z) of each order, signed, as a fraction of price; arguments broadcast over orders."""
    size = np.abs(imbalance_shares) / market.adv
    return (
        market.coefficient * market.ground_vol * np.sign(imbalance_shares) * size**market.exponent
    )


def impact_scale(market: Market) -> Array:
    """c = p k sigma_0 ADV^{-delta}: cost is c Q^{1+delta} times a pure number."""
    return market.price * market.coefficient * market.ground_vol * market.adv**-market.exponent


def impact_cost(stages: Stages, market: Market, shares: Array, initial: Array) -> Array:
    """Expected impact cost of each stage against the arrival price, (M,) currency.

    The arrival price already contains the displacement D(Z_0) of the imbalance at time zero.
    """
    layout, owner = stages.layout, stages.layout.owner
    power = 1.0 + market.exponent[owner]
    before, after = imbalance(layout, stages.theta, shares, initial)
    ends = (np.abs(after) ** power - np.abs(before) ** power) / power
    inside = stages.theta * integral_of_power(stages, before, shares, power)
    paid = impact_scale(market)[owner] * (ends + inside)
    in_arrival_price = (market.price * displacement(market, initial))[owner] * shares
    return np.where(shares > 0.0, paid - in_arrival_price, 0.0)


def integral_of_power(stages: Stages, before: Array, shares: Array, power: Array) -> Array:
    """int_0^1 |Z(u)|^power du over each stage, cut where Z changes sign."""
    fraction, weight = stages.nodes
    path = np.abs(imbalance_at(fraction, stages.theta, before, shares))
    total: Array = (weight * path**power).sum(axis=0)
    for m, u, w in stages.split_nodes(before, shares):
        path = np.abs(imbalance_at(u[:, None], stages.theta[m : m + 1], before[m], shares[m]))
        total[m] = w @ path[:, 0] ** power[m]
    return total


def block_cost(market: Market, end: Array, residual: Array) -> Array:
    """Impact of a residual R traded as one block on top of the imbalance Z_end, (N,) currency.

    c [|Z_end + R|^{1+delta} - |Z_end|^{1+delta}] / (1+delta).
    """
    power = 1.0 + market.exponent
    return impact_scale(market) * (np.abs(end + residual) ** power - np.abs(end) ** power) / power


def permanent_cost(market: Market, quantity: Array) -> Array:
    """(gamma sigma/2)(Q/ADV) Q p, the same for every schedule [ATHL 2005], (N,) currency."""
    return 0.5 * market.permanent * market.vol * quantity / market.adv * quantity * market.price
