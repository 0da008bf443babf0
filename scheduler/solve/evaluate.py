"""Value, gradient and Hessian of cost and variance over the quadrature nodes of a problem."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem

SMOOTHING = 1e-10  # rounding of |z| at 0: far below the tolerance in the objective
_FLOOR = 1e-30  # keeps |z|^{delta-1} finite where an order starts from rest


@dataclass(frozen=True)
class Point:
    """Cost and variance at one schedule, with derivatives by bucket.

    cost, risk : (N,). cost_slope, risk_slope : (3, M), by x_{t-1}, z_{t-1} and y_t.
    avoidable : (N,) impact, and charges beyond each order's cheapest bucket: never negative.
    curvature : (J, M) each, at the nodes: impact by z; variance by x, by z, and mixed.
    """

    cost: Array
    risk: Array
    avoidable: Array
    cost_slope: Array
    risk_slope: Array
    curvature: tuple[Array, Array, Array, Array]

    def take(self, orders: Index, at: Index) -> Point:
        """The point of some orders, whose buckets stand `at`."""
        bend, by_x, kink, mixed = self.curvature
        kink = kink[:, at] if kink.ndim == 2 else kink
        return Point(
            self.cost[orders],
            self.risk[orders],
            self.avoidable[orders],
            self.cost_slope[:, at],
            self.risk_slope[:, at],
            (bend[:, at], by_x[:, at], kink, mixed[:, at]),
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
        self.xx = np.array((u, u * u))
        layout = problem.layout
        self.dearer = problem.charge - layout.min(problem.charge)[layout.owner]
        exponent = problem.exponent
        self.root = bool((exponent == 0.5).all())
        self.power = np.broadcast_to((1.0 + exponent)[problem.layout.owner], al.shape[1:])

    def point(self, x: Array, z: Array, y: Array) -> Point:
        """Everything at the state (x_{t-1}, z_{t-1}) and slices y, each (M,)."""
        problem = self.problem
        node_z = self.al * z + self.be * y
        node_x = x - self.u * y
        level, slope, bend, size, turn, kink = self._powers(node_z)
        rate = problem.risk_weight + self.feedback_weight * size
        fed = self.feedback_weight * node_x
        by_x = 2.0 * node_x * rate
        by_z = fed * node_x
        bent = np.zeros(1) if kink is None else by_z * kink
        if self.level_weight is not None:
            by_z = by_z + self.level_weight
            bent = bent if kink is None else bent + self.level_weight * kink
        by_z = by_z if turn is None else by_z * turn
        pull = problem.impact_weight * slope
        cost_slope = np.zeros((3, len(y)))
        cost_slope[1:] = _sums(self.by_state, pull)
        cost_slope[2] += problem.charge
        risk_slope = np.empty((3, len(y)))
        risk_slope[0] = by_x.sum(axis=0)
        risk_slope[1:] = _sums(self.by_state, by_z)
        risk_slope[2] -= (self.u * by_x).sum(axis=0)
        layout = problem.layout
        impact = layout.sum((problem.impact_weight * level).sum(axis=0))
        cost = impact + layout.sum(problem.charge * y) + problem.constant_cost
        risk = 0.5 * layout.sum((by_x * node_x).sum(axis=0)) + problem.constant_risk
        if self.level_weight is not None:
            risk = risk + layout.sum((self.level_weight * size).sum(axis=0))
        mixed = 2.0 * fed if turn is None else 2.0 * fed * turn
        curvature = (problem.impact_weight * bend, 2.0 * rate, bent, mixed)
        avoidable = impact + layout.sum(self.dearer * y)
        return Point(cost, risk, avoidable, cost_slope, risk_slope, curvature)

    def _powers(self, z: Array) -> tuple[Array, Array, Array, Array, Array | None, Array | None]:
        """|z|^{1+delta} with two derivatives, |z| with two (None: 1 and 0).

        Where some order's imbalance may change sign, |z| is rounded off to
        sqrt(z^2 + SMOOTHING^2).
        """
        if self.problem.signed:
            return self._rounded_powers(z)
        size = np.maximum(z, _FLOOR)
        if self.root:
            root = np.sqrt(size)
            return size * root, 1.5 * root, 0.75 / root, size, None, None
        power = self.power
        bend = size ** (power - 2.0)
        slope = bend * size
        return slope * size, power * slope, power * (power - 1.0) * bend, size, None, None

    def _rounded_powers(self, z: Array) -> tuple[Array, Array, Array, Array, Array, Array]:
        power, square = self.power, z * z + SMOOTHING**2
        size = np.sqrt(square)
        base = size ** (power - 2.0)
        turn = z / size
        bend = power * base * (1.0 + (power - 2.0) * turn * turn)
        return base * square, power * base * z, bend, size, turn, SMOOTHING**2 / (square * size)

    def hessian(self, point: Point, risk_aversion: Array, convexify: Array | None = None) -> Array:
        """Stage Hessians (6, M) of C + lambda R, in the order of `flat.PAIRS`.

        Where `convexify` (M,) is 1, each node's own curvature is raised until its 2 x 2 block in
        (x, z) is positive semidefinite: h_zz >= h_xz^2 / h_xx.
        """
        impact, by_x, bent, mixed = point.curvature
        hx = risk_aversion * by_x
        hc = risk_aversion * mixed
        hz = impact + risk_aversion * bent
        if convexify is not None:
            missing = hc * hc / np.maximum(hx, 1e-300) - hz
            hz = hz + convexify * np.maximum(missing, 0.0)
        stage = np.empty((6, hz.shape[1]))
        stage[3:] = _sums(self.zz, hz)
        mixed_z, mixed_y, ahead_z, ahead_y = _sums(self.xz, hc)
        ahead, square = _sums(self.xx, hx)
        stage[0] = hx.sum(axis=0)
        stage[1] = mixed_z
        stage[2] = mixed_y - ahead
        stage[4] -= ahead_z
        stage[5] += square - 2.0 * ahead_y
        return stage


def _sums(maps: Array, values: Array) -> Array:
    """Sums over nodes of each map times the values, (K, J, M) and (J, M) to (K, M)."""
    result: Array = np.einsum("kjm,jm->km", maps, values)
    return result
