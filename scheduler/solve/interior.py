"""Primal-dual interior-point method for independent orders, all stacked in one batch.

Per order: minimise C(y) + U sqrt(R(y)) + lambda R(y) over 0 <= y <= cap, sum y = 1, and
x_t <= ceiling_t. Mehrotra predictor-corrector in the flat output (`flat`), which keeps sum y = 1
exactly. U sqrt(R) costs no extra iteration: lambda_k = U/(2 sqrt R) follows the iterate, and the
rank-one part -gamma r r' of its Hessian, r = grad R and gamma = lambda/(2 R), enters by
Sherman-Morrison.

Safeguards, each of which cured failures in trials: a floor under the barrier parameter, a
neighbourhood (no complementary pair below 1e-4 of the mean), a fallback without the second-order
term on short steps and where predictor and corrector go round in circles, and a duality-gap test
that charges what is left of the residual to the gap, because sqrt(z) makes residuals of vanishing
slices fade slowly though they are harmless.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem
from scheduler.solve.evaluate import SMOOTHING, Point
from scheduler.solve.names import Names
from scheduler.solve.optimality import implied_risk_aversion, total_gradient
from scheduler.solve.start import cold_start, warm_start

_FIRST_BARRIER = 1.0
_WARM_BARRIER = 1e-2
_WARM_SPREAD = 30.0  # duals of a warm start are at most so far from the central ones
_NEIGHBOURHOOD = 1e-4
_LIGHT = 1e-300  # keeps the weights of an order with one bucket from adding up to nothing
_SHORT_STEP = 0.15
_CIRCLES = 3  # steps without less complementarity after which second-order terms are left out
_LEAST_DENOMINATOR = 0.02
_BACKTRACKS = 60
_GUARD = 0.01  # least barrier, as a part of the gap, once curvature has been negative
_HALVINGS = 12
_SMOOTHER = 0.1  # rounding of |z|, of the relative complementarity
_COMPACT = 0.3  # finished orders are dropped from the batch above this share


@dataclass(frozen=True)
class Solution:
    """Schedules in fractions of each order.

    fractions : (M,) y. ceiling_price : (M,) multipliers of x_t <= ceiling_t, for the certificate.
    iterations : (N,) Newton steps. converged : (N,) whether the gap test was met. row_price :
    (2, m) multipliers of further rows, which the conic solver alone keeps.
    """

    fractions: Array
    ceiling_price: Array
    iterations: Index
    converged: NDArray[np.bool_]
    row_price: Array | None = None


@dataclass(frozen=True)
class _State:
    """One iterate: states before each bucket, slices, slacks of the bounds and their duals.

    By order: risk_aversion, lambda_k = lambda + U/(2 sqrt R); size, impact plus lambda_k Var, what
    tolerances are relative to; complementarity, the sum of slack times dual.
    """

    x: Array
    z: Array
    y: Array
    slack: Array
    dual: Array
    point: Point
    risk_aversion: Array
    size: Array
    complementarity: Array

    def take(self, orders: Index, at: Index) -> _State:
        """The state of some orders, whose buckets stand `at`."""
        values = {name: value[..., at] for name, value in vars(self).items() if name in _BY_BUCKET}
        values |= {name: getattr(self, name)[orders] for name in _BY_ORDER}
        return _State(point=self.point.take(orders, at), **values)


_BY_BUCKET = ("x", "z", "y", "slack", "dual")
_BY_ORDER = ("risk_aversion", "size", "complementarity")


def solve(
    problem: Problem,
    *,
    feedback_share: float = 1.0,
    level_weight: Array | None = None,
    start: Array | None = None,
    near: bool = True,
    tolerance: float = 1e-8,
    most_iterations: int = 80,
) -> Solution:
    """Solve every order of a problem that has room between its caps.

    Parameters
    ----------
    feedback_share : factor on the imbalance part of the variance, for homotopies.
    level_weight : (J, M) weights of |z_j| in the variance, for convex relaxations.
    start : (M,) fractions to start from. near : whether the solution is expected near them, so
    that their slopes say which bounds will bind.
    tolerance : relative duality gap asked for, to the impact and risk of the order.
    """
    run = _Run(problem, feedback_share, level_weight, tolerance)
    state = run.begin(start, near)
    count = len(problem.quantity)
    alive = np.arange(count)
    fractions, price = np.empty(problem.layout.entries), np.empty(problem.layout.entries)
    iterations, converged = np.zeros(count, dtype=np.int64), np.zeros(count, dtype=np.bool_)
    least, still = np.full(count, np.inf), np.zeros(count, dtype=np.int64)
    for step in range(most_iterations + 1):
        done = run.is_optimal(state) | converged[alive]
        fresh = np.flatnonzero(done & np.logical_not(converged[alive]))
        if step == most_iterations:
            fresh = np.flatnonzero(np.logical_not(converged[alive]))
        if len(fresh):
            orders = alive[fresh]
            _, here = run.layout.take(fresh)
            _, there = problem.layout.take(orders)
            fractions[there], price[there] = state.y[here], run.ceiling_price(state)[here]
            iterations[orders], converged[orders] = step, done[fresh]
        if done.all() or step == most_iterations:
            break
        if np.count_nonzero(done) > _COMPACT * len(alive):
            keep = np.flatnonzero(np.logical_not(done))
            state = state.take(keep, run.layout.take(keep)[1])
            run, alive = run.take(keep), alive[keep]
            least, still = least[keep], still[keep]
        still = np.where(state.complementarity < 0.9 * least, 0, still + 1)
        least = np.minimum(least, state.complementarity)
        state = run.step(state, plain=still >= _CIRCLES)
    return Solution(fractions, price, iterations, converged)


class _Run(Names):
    """The iteration on one set of orders; `step` maps a state to the next."""

    def __init__(
        self,
        problem: Problem,
        feedback_share: float,
        level_weight: Array | None,
        tolerance: float,
    ) -> None:
        super().__init__(problem, feedback_share, level_weight)
        self.feedback_share, self.tolerance = feedback_share, tolerance
        # |z|^{1+delta} bends too sharply at 0 for plain Newton steps, which flip its sign for
        # ever at delta = 1/2: it is rounded off, less and less
        self.bent = problem.signed
        self.smoothing: Array | float = SMOOTHING
        self.by_urgency = bool((problem.urgency > 0.0).any())

    def take(self, orders: Index) -> _Run:
        part = self.problem.take(orders)
        level = self.evaluator.level_weight
        if level is not None:
            level = level[:, self.layout.take(orders)[1]]
        smaller = _Run(part, self.feedback_share, level, self.tolerance)
        smaller.bent, smaller.bounds, smaller.pairs = self.bent, self.bounds, self.pairs[orders]
        return smaller

    # the start

    def begin(self, fractions: Array | None, near: bool) -> _State:
        problem, layout = self.problem, self.layout
        warm = fractions is not None
        y = cold_start(problem) if fractions is None else warm_start(problem, fractions)
        after = 1.0 - layout.cumsum(y)
        x = layout.before(after, np.ones(len(layout.size)))
        z_after = layout.scan(problem.decay, problem.gain * y, problem.initial)
        z = layout.before(z_after, problem.initial)
        slack = self.slacks(x, y)
        if self.bounds == 3:
            slack[2] = np.maximum(slack[2], 1e-2)
        state = self.state(x, z, y, slack, slack)
        barrier = (_WARM_BARRIER if warm else _FIRST_BARRIER) * state.size / self.pairs
        dual = self.spread(barrier) / slack
        if warm and near:
            dual = self.warm_dual(replace(state, dual=dual), dual)
        return replace(state, dual=dual, complementarity=layout.sum((slack * dual).sum(axis=0)))

    def warm_dual(self, state: _State, least: Array) -> Array:
        """Duals that the slope itself asks for, kept within reach of the central ones."""
        reduced = self.reduced_slope(state)
        dual = least.copy()
        dual[0] = np.clip(reduced, least[0], _WARM_SPREAD * least[0])
        dual[1] = np.clip(-reduced, least[1], _WARM_SPREAD * least[1])
        return dual

    def state(self, x: Array, z: Array, y: Array, slack: Array, dual: Array) -> _State:
        point = self.evaluator.point(x, z, y, self.smoothing)
        risk_aversion = implied_risk_aversion(self.problem, point.risk)
        size = point.avoidable + risk_aversion * point.risk
        complementarity = self.layout.sum((slack * dual).sum(axis=0))
        return _State(x, z, y, slack, dual, point, risk_aversion, size, complementarity)

    # the test

    def is_optimal(self, state: _State) -> NDArray[np.bool_]:
        """Whether each order's duality gap is within tolerance, (N,) bool.

        The cheap complementarity test decides whether the bound is worth computing.
        """
        allowed = self.tolerance * state.size
        near: NDArray[np.bool_] = state.complementarity <= allowed
        if not near.any():
            return near
        near &= self.gap(state) <= allowed
        near &= self.is_feasible(state)
        return near

    def is_feasible(self, state: _State) -> NDArray[np.bool_]:
        if self.bounds == 2:
            return np.ones(len(self.pairs), dtype=np.bool_)
        result: NDArray[np.bool_] = self.layout.max(np.abs(self.broken(state))) <= 1e-9
        return result

    def gap(self, state: _State) -> Array:
        """Bound on objective minus optimum, for the convexified objective, (N,).

        For any nu, F(y) - F* <= sum (G - nu)^+ y + (nu - G)^+ (cap - y), G the gradient of the
        Lagrangian with the ceilings' multipliers; cap at most 1 because the fractions sum to 1.
        """
        price = self.ceiling_price(state)
        reduced = self.reduced_slope(state)
        room = np.minimum(self.cap, 1.0) - state.y
        over = np.maximum(reduced, 0.0) * state.y - np.minimum(reduced, 0.0) * room
        result: Array = self.layout.sum(over + price * state.slack[-1])
        return result

    def reduced_slope(self, state: _State) -> Array:
        """G - nu, nu the level at which duals and slopes agree best over the freest buckets."""
        total = total_gradient(self.problem, self.stage_slope(state))
        if self.bounds == 3:
            total -= self.layout.reverse_cumsum(state.dual[2])
        room = np.maximum(np.minimum(self.cap, 1.0) - state.y, 0.0)
        weight = np.minimum(state.y, room) ** 2 + _LIGHT
        priced = total - state.dual[0] + state.dual[1]  # nu in every bucket, at convergence
        level = self.layout.sum(weight * priced) / self.layout.sum(weight)
        result: Array = total - self.spread(level)
        return result

    def ceiling_price(self, state: _State) -> Array:
        return state.dual[2] if self.bounds == 3 else np.zeros_like(state.y)

    def stage_slope(self, state: _State) -> Array:
        point = state.point
        result: Array = point.cost_slope + self.spread(state.risk_aversion) * point.risk_slope
        return result

    # the step

    def step(self, state: _State, plain: NDArray[np.bool_]) -> _State:
        """The next state; `plain` (N,): orders whose second-order terms are left out."""
        if self.problem.signed:
            far = _SMOOTHER * state.complementarity / state.size
            self.smoothing = self.spread(np.maximum(far, SMOOTHING))
        slope = self.stage_slope(state)
        barrier = state.dual / state.slack
        self.factor(state.point, state.risk_aversion, barrier)
        pairs = self.pairs
        mean = state.complementarity / pairs

        v, correction = self.affine(state, slope, barrier)
        _, slack, dual = self.direction(state, v, barrier, None)
        far = self.spread(np.minimum(self.reach(state, slack, dual), 1.0))
        ahead = ((state.slack + far * slack) * (state.dual + far * dual)).sum(axis=0)
        shrunk = self.layout.sum(ahead) / state.complementarity
        target = np.minimum(np.maximum(shrunk**3, 1e-6), 1.0) * mean
        target = np.maximum(target, 0.1 * self.tolerance * state.size / pairs)
        if self.bent:
            target = np.maximum(target, np.minimum(_GUARD * self.gap(state) / pairs, mean))
        second = slack * dual
        if plain.any():
            target = np.where(plain, np.maximum(target, 0.3 * mean), target)
            second = second * self.spread(np.where(plain, 0.0, 1.0))
        push = (self.spread(target) - second) / state.slack
        v = self.corrected(state, slope, barrier, push, correction)
        toward, slack, dual = self.direction(state, v, barrier, push)
        keep = np.minimum(np.maximum(1.0 - state.complementarity / state.size, 0.99), 0.9999)
        reach = np.minimum(1.0, keep * self.reach(state, slack, dual))
        short = reach < _SHORT_STEP
        if short.any():
            target = np.where(short, np.maximum(target, 0.3 * mean), target)
            here = self.spread(np.where(short, 1.0, 0.0)) > 0.0
            push = np.where(here, self.spread(target) / state.slack, push)
            v = self.corrected(state, slope, barrier, push, correction)
            toward, slack, dual = self.direction(state, v, barrier, push)
            reach = np.minimum(1.0, keep * self.reach(state, slack, dual))
        reach = self.stay_near_centre(state, slack, dual, reach)
        return self.move(state, toward, slack, dual, reach)

    def affine(self, state: _State, slope: Array, barrier: Array) -> tuple[Array, _Rank1 | None]:
        """The affine direction in flat outputs, and the rank-one correction, in one solve."""
        stage = np.empty((3, 2, slope.shape[1]))
        stage[:, 0], stage[:, 1] = slope, state.point.risk_slope
        self.add_ceilings(state, stage[:, 0], barrier, None)
        right = self.pull_back(stage)
        v = self.flat.solve(right)
        if not self.by_urgency:
            return -v[0], None
        correction = _Rank1(self, state.point, right[1], v[1])
        return correction.correct(-v[0]), correction

    def corrected(
        self, state: _State, slope: Array, barrier: Array, push: Array, correction: _Rank1 | None
    ) -> Array:
        """The direction toward barrier targets, in flat outputs; `push` is target over slack."""
        stage = slope.copy()
        stage[2] += push[1] - push[0]
        self.add_ceilings(state, stage, barrier, push)
        v: Array = self.flat.solve(-self.pull_back(stage)[None])[0]
        return v if correction is None else correction.correct(v)

    def add_ceilings(self, state: _State, stage: Array, barrier: Array, push: Array | None) -> None:
        if self.bounds == 2:
            return
        along = -barrier[2] * self.broken(state)
        if push is not None:
            along += push[2]
        stage[0] += along
        stage[2] -= along

    def broken(self, state: _State) -> Array:
        """What the slacks of ceilings are short of ceiling - x, (M,)."""
        result: Array = self.ceiling - state.x + state.y - state.slack[2]
        return result

    def direction(
        self, state: _State, v: Array, barrier: Array, push: Array | None
    ) -> tuple[Array, Array, Array]:
        """Stage, slack and dual directions of a flat output."""
        toward = self.flat.lift(v)
        slack = np.empty_like(state.slack)
        slack[0] = toward[2]
        np.negative(toward[2], out=slack[1])
        if self.bounds == 3:
            slack[2] = toward[2] - toward[0] + self.broken(state)
        dual = -(barrier * slack) - state.dual
        return toward, slack, dual if push is None else dual + push

    def reach(self, state: _State, slack: Array, dual: Array) -> Array:
        """Longest step at which slacks and duals stay positive, (N,)."""
        nearest = np.minimum(slack / state.slack, dual / state.dual).min(axis=0)
        longest: Array = 1.0 / np.maximum(-self.layout.min(nearest), 1e-300)
        return longest

    def stay_near_centre(self, state: _State, slack: Array, dual: Array, reach: Array) -> Array:
        """Shorten steps after which some pair would fall far below the mean."""
        for _ in range(_BACKTRACKS):
            far = self.spread(reach)
            products = (state.slack + far * slack) * (state.dual + far * dual)
            mean = self.layout.sum(products.sum(axis=0)) / self.pairs
            lost = self.layout.min(products.min(axis=0)) < _NEIGHBOURHOOD * mean
            if not lost.any():
                break
            reach = np.where(lost, 0.7 * reach, reach)
        return reach

    def move(self, state: _State, toward: Array, slack: Array, dual: Array, reach: Array) -> _State:
        """The state after a step.

        Once curvature has been negative, steps that raise the objective by more than the
        complementarity, which centring may cost, are halved.
        """
        for _ in range(_HALVINGS):
            far = self.spread(reach)
            x, z = state.x + far * toward[0], state.z + far * toward[1]
            y = state.y + far * toward[2]
            moved = self.state(x, z, y, state.slack + far * slack, state.dual + far * dual)
            if not self.bent:
                break
            rise = self.objective(moved.point) - self.objective(state.point)
            worse = rise > state.complementarity
            if not worse.any():
                break
            reach = np.where(worse, 0.5 * reach, reach)
        return moved

    def objective(self, point: Point) -> Array:
        problem = self.problem
        std = np.sqrt(np.maximum(point.risk, 0.0))  # of a relaxation it may be negative
        result: Array = point.cost + problem.urgency * std
        return result + problem.risk_aversion * point.risk


class _Rank1:
    """The matrix less gamma r r', the curvature that U sqrt(R) lacks: Sherman-Morrison."""

    def __init__(self, run: _Run, point: Point, risk: Array, along: Array) -> None:
        """`risk` is r in flat outputs, `along` what the factored matrix makes of it."""
        self.layout, self.spread = run.layout, run.spread
        self.risk, self.along = risk, along
        variance = np.where(point.risk > 0.0, point.risk, np.inf)
        gamma = 0.25 * run.problem.urgency / (variance * np.sqrt(variance))
        left = 1.0 - gamma * self.layout.sum(risk * along)
        enough = left > _LEAST_DENOMINATOR
        if not enough.all():
            run.bent = True
            gamma, left = np.where(enough, gamma, 0.0), np.where(enough, left, 1.0)
        self.strength = gamma / left

    def correct(self, v: Array) -> Array:
        """From a solution with the factored matrix to one with gamma r r' taken off."""
        amount = self.strength * self.layout.sum(self.risk * v)
        corrected: Array = v + self.spread(amount) * self.along
        return corrected
