"""Does chance explain an outcome? And how many such questions may a list ask?

An order's cost is held against its promised law F: with u = F(cost), the chance of an outcome as
far out on either side is 2 min(u, 1 - u). In a list of N orders some lie far out by chance, so
these are adjusted by Holm's method: in rising order p_(1) <= p_(2) <= ..., the k-th becomes the
largest of min(1, (N - i + 1) p_(i)) over i <= k. Flagging what is then at most a keeps the chance
of *any* false flag in the list at a or below, however the orders depend on each other. They do: a
market that falls is good for all buys at once, and what holds down the share of false flags only
among independent or kindly dependent questions (Benjamini and Hochberg) need not hold then.

S. Holm (1979), Scandinavian Journal of Statistics 6(2), 65-70.
"""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array


def both_sides(quantile: Array) -> Array:
    """Chance of an outcome at least as far out, on either side; NaN stays."""
    result: Array = 2.0 * np.minimum(quantile, 1.0 - quantile)
    return np.minimum(result, 1.0)


def holm(chance: Array) -> Array:
    """Chances adjusted for how many there are; NaN are no questions and stay."""
    result = np.full(len(chance), np.nan)
    asked = np.flatnonzero(~np.isnan(chance))
    order = asked[np.argsort(chance[asked], kind="stable")]
    times = np.arange(len(order), 0, -1)
    result[order] = np.minimum(np.maximum.accumulate(times * chance[order]), 1.0)
    return result
