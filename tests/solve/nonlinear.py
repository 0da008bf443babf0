"""A general-purpose nonlinear solver on the exact objective, for comparison.

Cost and variance come from the model's own functions with the finer quadrature of the reported
figures; nothing is shared with the solvers but those.
"""

from __future__ import annotations

import warnings

import numpy as np
from scipy.optimize import minimize

from scheduler.model.ragged import Array
from scheduler.problem import Orders
from tests.builders import cost_of, join, variance_of

_STEP = 1e-6


class Exact:
    """C + U sqrt(Var) + lambda Var of one order, in currency, by fractions of its free buckets."""

    def __init__(self, orders: Orders) -> None:
        self.orders = orders
        self.free = np.flatnonzero(orders.cap > 0.0)
        self.cap = np.minimum(orders.cap[self.free] / orders.quantity, 1.0)
        self.copies = {count: join([orders] * count) for count in (1, 1 + 2 * len(self.free))}

    def values(self, fractions: Array) -> Array:
        """At each row of (K, n) fractions."""
        shares = np.zeros((len(fractions), self.orders.stages.layout.entries))
        shares[:, self.free] = fractions * self.orders.quantity
        many = self.copies[len(fractions)]
        var = variance_of(many, shares.ravel())
        cost = cost_of(many, shares.ravel())
        result: Array = cost + many.urgency * np.sqrt(var) + many.risk_aversion * var
        return result

    def value(self, fractions: Array) -> float:
        return float(self.values(fractions[None])[0])

    def value_and_slope(self, fractions: Array) -> tuple[float, Array]:
        """Three-point differences: central, or forward where a slice is next to nothing."""
        count = len(fractions)
        steps = _STEP * np.eye(count)
        central = fractions > _STEP
        one, two = np.where(central, -1.0, 1.0)[:, None], np.where(central, 1.0, 2.0)[:, None]
        tried = np.vstack((fractions[None], fractions + one * steps, fractions + two * steps))
        found = self.values(tried)
        first, second = found[1 : count + 1], found[count + 1 :]
        forward = -3.0 * found[0] + 4.0 * first - second
        return float(found[0]), np.where(central, second - first, forward) / (2.0 * _STEP)

    def inside(self, fractions: Array) -> Array:
        """The nearest thing that keeps the caps and adds up to 1."""
        kept = np.clip(fractions, 0.0, self.cap)
        missing, room = 1.0 - kept.sum(), self.cap - kept
        return kept + missing * room / room.sum() if missing > 0.0 else kept / (1.0 - missing)

    def starts(self, seed: int) -> list[Array]:
        """Five: along the volume, even, early, late, at random."""
        rng = np.random.default_rng(seed)
        volume = self.orders.stages.theta[self.free]
        count = len(self.free)
        early = 0.5 ** np.arange(count)
        wanted = [volume, np.ones(count), early, early[::-1], rng.exponential(size=count)]
        return [self.inside(w / w.sum()) for w in wanted]


def best_nonlinear(exact: Exact, seed: int) -> float:
    """The least value SLSQP reaches from the five starts."""
    return min(_from(exact, start) for start in exact.starts(seed))


def _from(exact: Exact, start: Array) -> float:
    unit = exact.value(start)

    def scaled(y: Array) -> tuple[float, Array]:
        value, slope = exact.value_and_slope(y)
        return value / unit, slope / unit

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # of steps clipped to the bounds
        found = minimize(
            scaled,
            start,
            jac=True,
            method="SLSQP",
            bounds=list(zip(np.zeros_like(exact.cap), exact.cap, strict=True)),
            constraints=[
                {"type": "eq", "fun": lambda y: y.sum() - 1.0, "jac": lambda y: np.ones(len(y))}
            ],
            options={"ftol": 1e-13, "maxiter": 500},
        )
    return exact.value(exact.inside(found.x))
