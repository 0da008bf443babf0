"""What every interior-point iteration needs of its orders: bounds, matrices, gradients.

Bounds come as families of slacks, each (M,): y >= 0, cap - y >= 0, and, where some order has a
ceiling, ceiling_t - x_t >= 0. Missing caps and ceilings stand far away, so one path serves all.
"""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve.evaluate import Evaluator, Point
from scheduler.solve.flat import FlatSystem, owner_of
from scheduler.solve.start import FAR, finite

_REPAIRS = 8  # an order's matrix is repaired at most so often in a step
_FIRST_RIDGE = 1e-14


class Names:
    """The orders of an iteration, with their evaluator and their stacked band matrix."""

    def __init__(
        self, problem: Problem, feedback_share: float = 1.0, level_weight: Array | None = None
    ) -> None:
        self.problem, self.layout = problem, problem.layout
        self.evaluator = Evaluator(problem, feedback_share, level_weight)
        self.flat = FlatSystem(problem)
        self.cap = finite(problem.cap)
        self.bounds = 3 if np.isfinite(problem.ceiling).any() else 2
        self.ceiling = np.where(problem.ceiling < FAR, problem.ceiling, FAR)
        self.ceiling[self.layout.last] = FAR  # nothing is left after the last bucket
        self.pairs = self.bounds * self.layout.size
        self.bent = False  # whether the objective has shown negative curvature

    def spread(self, per_order: Array) -> Array:
        """Per-order values at each bucket."""
        return per_order if len(per_order) == 1 else per_order[self.layout.owner]

    def slacks(self, x: Array, y: Array) -> Array:
        slack = np.empty((self.bounds, len(y)))
        slack[0], slack[1] = y, self.cap - y
        if self.bounds == 3:
            slack[2] = self.ceiling - x + y
        return slack

    def pull_back(self, stage: Array) -> Array:
        """Stage slopes in flat outputs, overwriting them; the state at time zero is given."""
        stage[:2, ..., self.layout.first] = 0.0
        return self.flat.pull_back(stage)

    def factor(self, point: Point, risk_aversion: Array, barrier: Array) -> None:
        """Factor H + D; orders whose matrix is indefinite have their nodes convexified."""
        if not self.flat.factor(self.band(point, risk_aversion, barrier, None)):
            return
        convexify, ridge = np.zeros(len(self.pairs)), np.zeros(len(self.pairs))
        for _ in range(_REPAIRS * len(self.pairs)):
            band = self.band(point, risk_aversion, barrier, self.spread(convexify))
            band[0] *= 1.0 + self.spread(ridge)
            failure = self.flat.factor(band)
            if not failure:
                return
            self.bent = True
            order = owner_of(failure, self.layout.first)
            if convexify[order]:  # rounding, not curvature
                ridge[order] = max(100.0 * ridge[order], _FIRST_RIDGE)
            convexify[order:] = 1.0

    def band(
        self, point: Point, risk_aversion: Array, barrier: Array, convexify: Array | None
    ) -> Array:
        stage = self.evaluator.hessian(point, self.spread(risk_aversion), convexify)
        stage[5] += barrier[0] + barrier[1]
        if self.bounds == 3:
            stage[0] += barrier[2]
            stage[2] -= barrier[2]
            stage[5] += barrier[2]
        return self.flat.assemble(stage)
