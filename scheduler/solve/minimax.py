"""Least worst regret of one order over several worlds, by an interior-point method.

In world k the schedule y costs F_k(y) = C_k + lambda Var_k, and F*_k at best. Over y and t,

    minimise t:  F_k(y) - F*_k <= t,  0 <= y <= cap,  sum y = 1,  x <= ceiling.

Each world has an imbalance of its own, so nothing is local as it is in one world alone: the Newton
matrix is dense, sum_k m_k grad^2 F_k, m_k the multipliers of the worlds. They are weights that add
up to 1, and any weights w prove that no schedule does better than

    min_v sum_k w_k (F_k(v) - F*_k)  >=  sum_k w_k (F_k(y) - F*_k) + min_v g'(v - y),

g = sum_k w_k grad F_k(y), where every F_k is convex; the last minimum is exact, by sorting. Steps
are Mehrotra's; slacks of the worlds are variables of their own, so that a step along a curved
F_k is not cut short.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, replace

import numpy as np

from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve.evaluate import Evaluator, Point
from scheduler.solve.linear import due
from scheduler.solve.optimality import Parts, duality_gap, kkt_residual, total_gradient
from scheduler.solve.start import warm_start

_TOLERANCE = 1e-6  # of the worst regret
_SURE = 1e-9  # of impact and risk: F*_k is not known to more
_MOST_STEPS = 60
_TO_BOUND = 0.99
_GUARD = 0.01  # least barrier, as a part of the gap
_BROKEN = 1e-9  # of the order: what a ceiling may be missed by


@dataclass(frozen=True)
class Minimax:
    """A schedule and what is known of it, in the problem's units.

    fractions : (n,) y. weights : (K,) of the worlds, adding up to 1. regret : (K,) at y.
    bound : no schedule has a lesser worst regret, if every world is convex. size : impact and risk
    of the dearest world; kkt_residual : of the weighted objectives, relative to that.
    iterations : Newton steps.
    """

    fractions: Array
    weights: Array
    regret: Array
    bound: float
    size: float
    kkt_residual: float
    iterations: int

    @property
    def worst(self) -> float:
        return float(self.regret.max())


def least_worst_regret(problem: Problem, least: Array, start: Array) -> Minimax:
    """Minimise the largest F_k(y) - least_k.

    Parameters
    ----------
    problem : one order in K worlds as K orders of equal caps and ceilings, in one unit of money
    (`Problem.in_unit`), whose only price of risk is its risk_aversion.
    least : (K,) the objective of each world's own best schedule.
    start : (n,) fractions to begin from; the answer is never worse.
    """
    run = _Run(problem, least, start)
    best = run.judged(start, np.full(len(least), 1.0 / len(least)), np.zeros(len(run.due)), 0)
    found, bound = best, max(best.bound, 0.0)  # no regret is below 0
    if best.worst <= run.enough(best):
        return replace(best, bound=bound)
    state = run.begin(warm_start(run.one, start))
    for step in range(1, _MOST_STEPS + 1):
        state = run.step(state, found.worst - found.bound)
        if not np.isfinite(state.y).all():
            break
        worlds, ceilings = state.price[: run.worlds], state.price[run.worlds + 2 * run.buckets :]
        found = run.judged(state.y, worlds, ceilings, step)
        bound = max(bound, found.bound)
        if found.worst < best.worst and run.keeps_ceilings(state.y):
            best = found
        if best.worst - bound <= run.enough(best):
            break
    return replace(best, bound=bound, iterations=step)


@dataclass(frozen=True)
class _State:
    """One iterate: slices y, the bound t on every regret, slacks and their multipliers.

    slack, price : (K + 2n + c,) of the worlds, t - regret; of 0 <= y; of y <= cap; of ceilings.
    """

    y: Array
    t: float
    slack: Array
    price: Array


class _Run:
    """The iteration; `step` maps a state to the next."""

    def __init__(self, problem: Problem, least: Array, start: Array) -> None:
        self.problem, self.least = problem, least
        self.worlds, self.buckets = len(least), int(problem.layout.size[0])
        self.one = problem.take(np.zeros(1, dtype=np.int64))
        self.evaluator = Evaluator(problem)
        self.cap = np.minimum(self.one.cap, 1.0)
        self.due = due(self.one)
        self.done = np.tri(self.buckets)[self.due]  # what is traded by a ceiling
        self.asked = 1.0 - self.one.ceiling[self.due]
        self.by_x, self.by_z = -np.tri(self.buckets, k=-1), self._imbalances()
        point = self.point(start)
        self.size = float((point.avoidable + problem.risk_aversion * np.abs(point.risk)).max())

    def _imbalances(self) -> Array:
        """dz_{t-1}/dy_s in every world, (K, n, n)."""
        decay, gain = (v.reshape(self.worlds, -1) for v in (self.problem.decay, self.problem.gain))
        result = np.zeros((self.worlds, self.buckets, self.buckets))
        for t in range(1, self.buckets):
            result[:, t] = decay[:, t - 1, None] * result[:, t - 1]
            result[:, t, t - 1] = gain[:, t - 1]
        return result

    def point(self, y: Array) -> Point:
        problem, layout = self.problem, self.problem.layout
        every = np.tile(y, self.worlds)
        z = layout.scan(problem.decay, problem.gain * every, problem.initial)
        x = layout.before(1.0 - layout.cumsum(every), np.ones(self.worlds))
        return self.evaluator.point(x, layout.before(z, problem.initial), every)

    def regret(self, point: Point) -> Array:
        result: Array = point.cost + self.problem.risk_aversion * point.risk - self.least
        return result

    def slopes(self, point: Point) -> Array:
        """Gradients of the objectives by y, (K, n)."""
        price = self.problem.risk_aversion[self.problem.layout.owner]
        slope = point.cost_slope + price * point.risk_slope
        return total_gradient(self.problem, slope).reshape(self.worlds, -1)

    def hessian(self, point: Point, weights: Array) -> Array:
        """sum_k w_k grad^2 F_k by y, (n, n), raised to be positive semidefinite at every node."""
        owner = self.problem.layout.owner
        price = self.problem.risk_aversion[owner]
        stage = self.evaluator.hessian(point, price, np.ones(len(owner))) * weights[owner]
        xx, xz, xy, zz, zy, yy = stage.reshape(6, self.worlds, -1)
        x, z = self.by_x, self.by_z
        half = 0.5 * xx.sum(axis=0)[:, None] * x + (xz[:, :, None] * z).sum(axis=0)
        mixed = x.T @ (half + np.diag(xy.sum(axis=0)))
        flat = z.reshape(-1, self.buckets)
        own = flat.T @ (0.5 * zz[:, :, None] * z).reshape(flat.shape)
        own += (z.transpose(0, 2, 1) * zy[:, None, :]).sum(axis=0)
        half = mixed + own + 0.5 * np.diag(yy.sum(axis=0))
        result: Array = half + half.T
        return result

    def enough(self, found: Minimax) -> float:
        """The gap that is small enough."""
        return _TOLERANCE * found.worst + _SURE * self.size

    def keeps_ceilings(self, y: Array) -> bool:
        return bool((self.done @ y >= self.asked - _BROKEN).all())

    def judged(self, y: Array, worlds: Array, ceilings: Array, step: int) -> Minimax:
        """What a schedule and multipliers prove."""
        point = self.point(y)
        weights = worlds / worlds.sum()
        regret, slope = self.regret(point), weights @ self.slopes(point)
        one = point.take(np.zeros(1, dtype=np.int64), np.arange(self.buckets))
        price = np.zeros(self.buckets)
        price[self.due] = ceilings
        parts = Parts(one, self.problem.risk_aversion[:1], slope, np.array([self.size]))
        bound = float(weights @ regret - duality_gap(self.one, parts, y, price)[0])
        residual = float(kkt_residual(self.one, parts, y, price)[0])
        return Minimax(y, weights, regret, bound, self.size, residual, step)

    def begin(self, y: Array) -> _State:
        """Strictly inside every bound; the worlds weigh alike."""
        regret = self.regret(self.point(y))
        t = float(regret.max() + 0.1 * max(np.ptp(regret), regret.max()))
        room = np.maximum(self.done @ y - self.asked, 1e-2)
        slack = np.concatenate((t - regret, y, self.cap - y, room))
        target = float((t - regret).mean()) / self.worlds
        price = target / slack
        price[: self.worlds] = 1.0 / self.worlds
        return _State(y, t, slack, price)

    def step(self, state: _State, gap: float) -> _State:
        """Predict, correct, and go as far as every slack and multiplier stays positive."""
        system = _System(self, state)
        mean = float(state.slack @ state.price) / len(state.slack)
        aim = system.direction(np.zeros_like(state.slack))
        reach = min(1.0, _reach(state, aim))
        ahead = float((state.slack + reach * aim.slack) @ (state.price + reach * aim.price))
        target = max((ahead / len(state.slack) / mean) ** 3, 1e-4) * mean
        target = max(target, min(_GUARD * gap / len(state.slack), mean))
        toward = system.direction(target - aim.slack * aim.price)
        far = min(1.0, _TO_BOUND * _reach(state, toward))
        return _State(
            state.y + far * toward.y,
            state.t + far * toward.t,
            state.slack + far * toward.slack,
            state.price + far * toward.price,
        )


class _System:
    """Newton's equations at one state, slacks and multipliers eliminated, factored once.

    With ds = B (dy, dt) + broken and s dp + p ds = target - s p, what is left is
    (H + B' diag(p/s) B) (dy, dt) + nu (1, 0) = B' ((target - p broken) / s) - (0, 1).
    """

    def __init__(self, run: _Run, state: _State) -> None:
        from scipy.linalg import LinAlgWarning, lu_factor  # noqa: PLC0415

        self.run, self.state = run, state
        point, n, k = run.point(state.y), run.buckets, run.worlds
        self.by = np.zeros((len(state.slack), n + 1))
        self.by[:k, :n], self.by[:k, n] = -run.slopes(point), 1.0
        self.by[k : k + n, :n], self.by[k + n : k + 2 * n, :n] = np.eye(n), -np.eye(n)
        self.by[k + 2 * n :, :n] = run.done
        self.broken = np.zeros_like(state.slack)
        self.broken[:k] = state.t - run.regret(point) - state.slack[:k]
        self.broken[k + 2 * n :] = run.done @ state.y - run.asked - state.slack[k + 2 * n :]
        matrix = np.zeros((n + 2, n + 2))
        stiff = (state.price / state.slack)[:, None]
        matrix[:-1, :-1] = self.by.T @ (stiff * self.by)
        matrix[:n, :n] += run.hessian(point, state.price[:k])
        matrix[:n, -1] = matrix[-1, :n] = 1.0
        with warnings.catch_warnings():  # a singular matrix gives steps that are not finite
            warnings.simplefilter("ignore", LinAlgWarning)
            self.factor = lu_factor(matrix, check_finite=False)

    def direction(self, target: Array) -> _State:
        """Toward products of slack and multiplier of `target`."""
        from scipy.linalg import lu_solve  # noqa: PLC0415

        state = self.state
        wanted = (target - state.price * self.broken) / state.slack
        right = np.append(self.by.T @ wanted, 1.0 - state.y.sum())
        right[-2] -= 1.0
        step = lu_solve(self.factor, right, check_finite=False)[:-1]
        slack = self.by @ step + self.broken
        price = (target - state.price * slack) / state.slack - state.price
        return _State(step[:-1], float(step[-1]), slack, price)


def _reach(state: _State, toward: _State) -> float:
    """The longest step at which every slack and multiplier stays positive."""
    rate = min((toward.slack / state.slack).min(), (toward.price / state.price).min())
    return float(1.0 / max(-rate, 1e-300))
