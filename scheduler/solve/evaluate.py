"""Value, gradient and Hessian of cost and variance over the quadrature nodes of a problem."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem

SMOOTHING = 1e-9  # rounding of |z| at 0: below the tolerance in the objective
_FLOOR = 1e-30  # keeps |z|^{delta-1} finite where an order starts from rest


@dataclass(frozen=True)
class Point:
    """Cost and variance at one schedule, with derivatives by bucket.

    cost, risk : (N,). cost_slope, risk_slope : (3, M), by x_{t-1}, z_{t-1} and y_t.
    avoidable : (N,) impact, charges beyond each order's cheapest bucket, and a hundredth of what
    charges differ by between its buckets: positive, what tolerances are relative to.
    curvature : (J, M) each, at the nodes: impact by z; half the variance's by x, its by z
    (None: 0), and half its mixed one.
    """

    cost: Array
    risk: Array
    avoidable: Array
    cost_slope: Array
    risk_slope: Array
    curvature: tuple[Array, Array, Array | None, Array]

    def take(self, orders: Index, at: Index) -> Point:
        """The point of some orders, whose buckets stand `at`."""
        bend, rate, bent, fed = self.curvature
        return Point(
            self.cost[orders],
            self.risk[orders],
            self.avoidable[orders],
            self.cost_slope[:, at],
            self.risk_slope[:, at],
            (bend[:, at], rate[:, at], None if bent is None else bent[:, at], fed[:, at]),
        )


class Evaluator:
    """A problem's nodes with what is constant from one Newton iteration to the next."""

    def __init__(
        self, problem: Problem, feedback_share: float = 1.0, level_weight: Array | None = None
    ) -> None:
        """`level_weight` (J, M) adds sum_j level_weight_j |z_j| to the variance (relaxations)."""
        self.problem = problem
        self.level_weight = level_weight
        self.feedback_weight = problem.feedback_weight * feedback_share
        al, be, u = problem.node_decay, problem.node_gain, problem.node_share
        self.al, self.be, self.u = al, be, u
        self.by_state = np.array((al, be))  # dz_j by z_{t-1} and y_t; dx_j is 1 and -u_j
        self.zz = np.array((al * al, al * be, be * be))
        self.xz = np.array((al, be, al * u, be * u))
        self.xx = 2.0 * np.array((np.ones_like(u), u, u * u))
        layout = problem.layout
        self.held = problem.residual[layout.owner] if problem.residual.any() else None
        self.dearer = problem.charge - layout.min(problem.charge)[layout.owner]
        self.at_stake = 0.01 * layout.max(self.dearer)
        exponent = problem.exponent
        self.root = bool((exponent == 0.5).all())
        self.power = (1.0 + exponent)[layout.owner]
        self.slope_weight = problem.impact_weight * self.power
        self.bend_weight = self.slope_weight * (self.power - 1.0)

    def point(self, x: Array, z: Array, y: Array, smoothing: Array | float = SMOOTHING) -> Point:
        """Everything at the state (x_{t-1}, z_{t-1}) and slices y, each (M,).

        Where some order's imbalance may change sign, |z| is rounded off to
        sqrt(z^2 + smoothing^2); `smoothing` is a number or (M,).
        """
        problem = self.problem
        node_z = self.al * z + self.be * y
        node_x = x - self.u * y if self.held is None else x + self.held - self.u * y
        pull, bend, size, turn, kink = self._powers(node_z, smoothing)
        rate = problem.risk_weight + self.feedback_weight * size
        fed = self.feedback_weight * node_x
        by_x = node_x * rate
        by_z = fed * node_x
        if self.level_weight is not None:
            by_z = by_z + self.level_weight
        bent = None if kink is None else by_z * kink
        if turn is not None:
            by_z, fed = by_z * turn, fed * turn
        cost_slope = np.zeros((3, len(y)))
        cost_slope[1:] = _sums(self.by_state, pull)
        cost_slope[2] += problem.charge
        risk_slope = np.empty((3, len(y)))
        risk_slope[1:] = _sums(self.by_state, by_z)
        risk_slope[0], ahead = _sums(self.xx[:2], by_x)
        risk_slope[2] -= ahead
        totals = np.empty((4, len(y)))
        totals[0] = _sum(pull, node_z if turn is not None else size) / self.power
        totals[1] = _sum(by_x, node_x)
        totals[2], totals[3] = problem.charge * y, self.dearer * y
        impact, risk, charges, dearer = problem.layout.sum(totals)
        if self.level_weight is not None:
            risk = risk + problem.layout.sum(_sum(self.level_weight, size))
        return Point(
            impact + charges + problem.constant_cost,
            risk + problem.constant_risk,
            impact + dearer + self.at_stake,
            cost_slope,
            risk_slope,
            (bend, rate, bent, fed),
        )

    def _powers(
        self, z: Array, smoothing: Array | float
    ) -> tuple[Array, Array, Array, Array | None, Array | None]:
        """Two derivatives of the weighted |z|^{1+delta}; |z| with two of its own (None: 1, 0)."""
        if self.problem.signed:
            return self._rounded_powers(z, smoothing)
        size = np.maximum(z, _FLOOR)
        if self.root:
            root = np.sqrt(size)
            return self.slope_weight * root, self.bend_weight / root, size, None, None
        bend = size ** (self.power - 2.0)
        return self.slope_weight * bend * size, self.bend_weight * bend, size, None, None

    def _rounded_powers(
        self, z: Array, smoothing: Array | float
    ) -> tuple[Array, Array, Array, Array, Array]:
        square = z * z + smoothing**2
        size = np.sqrt(square)
        base = self.slope_weight * size ** (self.power - 2.0)
        turn = z / size
        bend = base * (1.0 + (self.power - 2.0) * turn * turn)
        return base * z, bend, size, turn, smoothing**2 / (square * size)

    def hessian(self, point: Point, risk_aversion: Array, convexify: Array | None = None) -> Array:
        """Stage Hessians (6, M) of C + lambda R, in the order of `flat.PAIRS`.

        Where `convexify` (M,) is 1, each node's own curvature is raised until its 2 x 2 block in
        (x, z) is positive semidefinite: h_zz >= h_xz^2 / h_xx.
        """
        bend, rate, bent, fed = point.curvature
        hx, hc = risk_aversion * rate, (2.0 * risk_aversion) * fed
        hz = bend if bent is None else bend + risk_aversion * bent
        if convexify is not None:
            missing = hc * hc / np.maximum(2.0 * hx, 1e-300) - hz
            hz = hz + convexify * np.maximum(missing, 0.0)
        stage = np.empty((6, hz.shape[1]))
        stage[3:] = _sums(self.zz, hz)
        stage[1], stage[2], ahead_z, ahead_y = _sums(self.xz, hc)
        stage[0], ahead, square = _sums(self.xx, hx)
        stage[2] -= ahead
        stage[4] -= ahead_z
        stage[5] += square - 2.0 * ahead_y
        return stage


def _sum(left: Array, right: Array) -> Array:
    """Sum over nodes of a product, (J, M) each to (M,)."""
    result: Array = np.einsum("jm,jm->m", left, right)
    return result


def _sums(maps: Array, values: Array) -> Array:
    """Sums over nodes of each map times the values, (K, J, M) and (J, M) to (K, M)."""
    result: Array = np.einsum("kjm,jm->km", maps, values)
    return result
