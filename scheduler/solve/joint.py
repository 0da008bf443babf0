"""Interior-point method for a list whose names share factor risk and corridors.

Minimise sum C_i + U sqrt(R) + lambda R, R the sum of the names' own variances and the factors',
over each name's caps and completion, with lower <= A x + constant <= upper at the limited edges and
a least part of a name in each span.
Names are eliminated first (one stacked band matrix), then factors and corridors (`coupled`). The
iteration is that of `interior`, with one step length and one risk aversion for all; corridor
levels w have slacks of their own and may start away from A x + constant: the difference rho is
driven to 0.

Barrier targets differ by name: half in proportion to how much the objective's slope varies over the
name's buckets, half even, so that neither large nor small names hold the others up.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array
from scheduler.problem import Problem
from scheduler.solve.coupled import CoupledSystem
from scheduler.solve.evaluate import Point
from scheduler.solve.names import Names
from scheduler.solve.optimality import total_gradient
from scheduler.solve.start import FAR, cold_start, warm_start

_FIRST_BARRIER, _WARM_BARRIER = 1.0, 3e-2
_NEIGHBOURHOOD = 1e-4
_LIGHT = 1e-300  # keeps the weights of an order with one bucket from adding up to nothing
_SHORT_STEP = 0.15
_LEAST_DENOMINATOR = 0.02
_BACKTRACKS = 60
_GUARD = 0.01
_CORRIDOR_PART = 0.1  # of the barrier weights
_FEASIBLE = 1e-9  # largest rho, relative to the corridors' scale
_LOOSE, _TIGHT = 1e-1, 3e-3  # of the factor rows; tighter ones do not save an iteration
_CIRCLES = 3  # steps without less complementarity after which second-order terms are left out
_STALLED = 12  # iterations without progress on rho after which corridors count as infeasible


@dataclass(frozen=True)
class JointSolution:
    """One schedule for all names.

    fractions : (M,) y. lower_price, upper_price : (n + S,) multipliers of corridors and spans.
    gap : duality gap relative to impact and risk. excess : largest corridor violation, money.
    row_price : (2, m) multipliers of further rows, which the conic solver alone keeps.
    """

    fractions: Array
    lower_price: Array
    upper_price: Array
    iterations: int
    gradient_steps: int
    gap: float
    excess: float
    converged: bool
    row_price: Array | None = None


@dataclass(frozen=True)
class _State:
    """slack, dual : (2, M) of slices' bounds; wall, price : (2, n + S) of corridors and spans."""

    x: Array
    z: Array
    y: Array
    slack: Array
    dual: Array
    level: Array
    wall: Array
    price: Array
    point: Point
    exposure: Array
    risk: float
    risk_aversion: float
    size: float
    complementarity: float


def solve(
    problem: Problem,
    coupling: Coupling,
    *,
    urgency: float = 0.0,
    risk_aversion: float = 0.0,
    start: Array | None = None,
    feedback_share: float = 1.0,
    level_weight: Array | None = None,
    tolerance: float = 1e-8,
    most_iterations: int = 100,
) -> JointSolution:
    """Solve a list whose money is all in one unit (`Problem.in_unit`, `Coupling.scaled`).

    Parameters
    ----------
    urgency, risk_aversion : U, and lambda in 1/unit, of the whole list.
    start : (M,) earlier fractions.
    feedback_share : factor on the imbalance part of the variance, for homotopies.
    level_weight : (J, M) weights of |z_j| in the variance, for convex relaxations.
    """
    shape = (feedback_share, level_weight)
    run = _Joint(problem, coupling, urgency, risk_aversion, tolerance, shape)
    state = run.begin(start)
    steps, best, waiting = 0, np.inf, 0
    for steps in range(most_iterations + 1):
        if steps == most_iterations or run.is_optimal(state):
            break
        run.plain = run.has_stalled(state.complementarity)
        worst = run.broken(state)
        waiting = 0 if worst < 0.9 * best else waiting + 1
        best = min(best, worst)
        if waiting > _STALLED and worst > _FEASIBLE:
            break
        state = run.step(state)
    excess = max(0.0, -float(run.outside(state).min(initial=0.0)))
    return JointSolution(
        fractions=state.y,
        lower_price=state.price[0],
        upper_price=state.price[1],
        iterations=steps,
        gradient_steps=run.system.steps,
        gap=run.gap(state) / state.size,
        excess=excess * run.money,
        converged=run.is_optimal(state),
    )


class _Joint(Names):
    def __init__(
        self,
        problem: Problem,
        coupling: Coupling,
        urgency: float,
        risk_aversion: float,
        tolerance: float,
        shape: tuple[float, Array | None],
    ) -> None:
        super().__init__(problem, *shape)
        self.coupling, self.tolerance = coupling, tolerance
        self.urgency, self.fixed_aversion = urgency, risk_aversion
        self.system = CoupledSystem(problem, coupling, self.flat)
        self.owner = self.layout.owner
        self.plain, self.still, self.least = False, 0, np.inf
        self.money = coupling.money
        lower, upper = coupling.bounds
        narrow = np.where(upper - lower < 2.0 * _FEASIBLE * self.money, _FEASIBLE * self.money, 0.0)
        self.lower = np.maximum(lower - narrow, -FAR * self.money)
        self.upper = np.minimum(upper + narrow, FAR * self.money)

    # states

    def begin(self, fractions: Array | None) -> _State:
        problem, layout = self.problem, self.layout
        y = cold_start(problem) if fractions is None else warm_start(problem, fractions)
        x = layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size)))
        z_after = layout.scan(problem.decay, problem.gain * y, problem.initial)
        z = layout.before(z_after, problem.initial)
        margin = 0.1 * np.minimum(self.upper - self.lower, self.money)
        level = np.clip(self.coupling.levels(x, y), self.lower + margin, self.upper - margin)
        slack = np.stack((y, self.cap - y))
        wall = np.stack((level - self.lower, self.upper - level))
        state = self.state(x, z, y, slack, slack, level, wall, wall)
        self.target = self.weights(state)
        first = (_FIRST_BARRIER if fractions is None else _WARM_BARRIER) * state.size
        dual = first * self.target[self.owner] / slack
        price = first * self.wall_target / wall
        return self.state(x, z, y, slack, dual, level, wall, price)

    def state(
        self,
        x: Array,
        z: Array,
        y: Array,
        slack: Array,
        dual: Array,
        level: Array,
        wall: Array,
        price: Array,
    ) -> _State:
        point = self.evaluator.point(x, z, y)
        exposure = self.coupling.exposures(x, y)
        risk = float(point.risk.sum() + np.vdot(exposure, exposure))
        implied = 0.5 * self.urgency / np.sqrt(risk) if risk > 0.0 else 0.0
        aversion = self.fixed_aversion + implied
        size = float(point.avoidable.sum()) + aversion * risk
        complementarity = float(np.vdot(slack, dual) + np.vdot(wall, price))
        return _State(
            x, z, y, slack, dual, level, wall, price,
            point, exposure, risk, aversion, size, complementarity,
        )  # fmt: skip

    def weights(self, state: _State) -> Array:
        """Share of the barrier target of each pair of a name, (N,); sets that of a corridor."""
        walls = state.wall.size
        part = _CORRIDOR_PART if walls else 0.0
        self.wall_target = part / walls if walls else 0.0
        slope = total_gradient(self.problem, self.stage_slope(state))
        swing = self.layout.max(slope) - self.layout.min(slope)
        total = swing.sum()
        share = swing / total if total > 0.0 else np.full(len(swing), 1.0 / len(swing))
        result: Array = (1.0 - part) * (0.5 * share + 0.5 / len(swing)) / self.pairs
        return result

    # slopes

    def risk_slope(self, state: _State) -> Array:
        """(3, M) slopes of R by x_{t-1}, z_{t-1} and y_t."""
        by_x, by_y = self.coupling.pull_exposures(2.0 * state.exposure, self.layout.entries)
        slope = state.point.risk_slope.copy()
        slope[0] += by_x
        slope[2] += by_y
        return slope

    def stage_slope(self, state: _State) -> Array:
        result: Array = state.point.cost_slope + state.risk_aversion * self.risk_slope(state)
        return result

    def add_price(self, slope: Array, price: Array) -> None:
        """Add the slope of price . levels."""
        if len(price):
            by_x, by_y = self.coupling.pull_levels(price, self.layout.entries)
            slope[0] += by_x
            slope[2] += by_y

    # the test

    def outside(self, state: _State) -> Array:
        """(2, n) distance of A x + constant to its bounds, negative where broken."""
        level = self.coupling.levels(state.x, state.y)
        return np.stack((level - self.lower, self.upper - level)) / self.money

    def broken(self, state: _State) -> float:
        """Largest rho, relative."""
        rho = self.coupling.levels(state.x, state.y) - state.level
        return float(np.abs(rho).max(initial=0.0)) / self.money

    def is_optimal(self, state: _State) -> bool:
        allowed = self.tolerance * state.size
        if state.complementarity > allowed or self.broken(state) > _FEASIBLE:
            return False
        return self.gap(state) <= allowed

    def gap(self, state: _State) -> float:
        """Bound on the objective minus its minimum, if it is convex.

        As in `interior`, name by name, with the corridors priced in by their multipliers.
        """
        slope = self.stage_slope(state)
        self.add_price(slope, state.price[1] - state.price[0])
        total = total_gradient(self.problem, slope)
        room = np.minimum(self.cap, 1.0) - state.y
        weight = np.minimum(state.y, np.maximum(room, 0.0)) ** 2 + _LIGHT
        priced = total - state.dual[0] + state.dual[1]
        level = self.layout.sum(weight * priced) / self.layout.sum(weight)
        reduced = total - level[self.owner]
        over = np.maximum(reduced, 0.0) * state.y - np.minimum(reduced, 0.0) * room
        walls = np.maximum(self.outside(state) * self.money, 0.0)
        return float(over.sum() + np.vdot(state.price, walls))

    # the step

    def has_stalled(self, complementarity: float) -> bool:
        """Whether complementarity has not fallen for some steps: then second-order terms mislead.

        Predictor and corrector can go round in circles; plain centred steps lead out.
        """
        fell = complementarity < 0.9 * self.least
        self.least = min(self.least, complementarity)
        self.still = 0 if fell else self.still + 1
        return self.still >= _CIRCLES

    def step(self, state: _State) -> _State:
        self.prepare(state)
        slope = self.stage_slope(state)
        affine = self.direction(state, slope, None, _LOOSE)
        reach = min(1.0, self.reach(state, affine))
        ahead = self.complementarity_after(state, affine, reach)
        centred = float(np.clip((ahead / state.complementarity) ** 3, 1e-6, 1.0))
        target = max(centred * state.complementarity, 0.1 * self.tolerance * state.size)
        if self.bent:
            target = max(target, min(_GUARD * self.gap(state), state.complementarity))
        target = target if not self.plain else max(target, 0.3 * state.complementarity)
        second = None if self.plain else affine
        move = self.direction(state, slope, self.pull(second, target), _TIGHT)
        keep = float(np.clip(1.0 - state.complementarity / state.size, 0.99, 0.9999))
        reach = min(1.0, keep * self.reach(state, move))
        if reach < _SHORT_STEP:
            target = max(target, 0.3 * state.complementarity)
            move = self.direction(state, slope, self.pull(None, target), _TIGHT)
            reach = min(1.0, keep * self.reach(state, move))
        return self.move(state, move, self.stay_near_centre(state, move, reach))

    def prepare(self, state: _State) -> None:
        barrier = state.dual / state.slack
        risk_aversion = np.full(len(self.pairs), state.risk_aversion)
        self.factor(state.point, risk_aversion, barrier)
        weight = (state.price / state.wall).sum(axis=0)
        self.system.prepare(2.0 * state.risk_aversion, weight)
        self.along: Array | None = None
        if self.urgency > 0.0 and state.risk > 0.0:
            self.risk_v = self.pull_back(self.risk_slope(state))
            self.along, self.along_level = self.system.solve(self.risk_v, _TIGHT)
            gamma = 0.25 * self.urgency * state.risk**-1.5
            left = 1.0 - gamma * float(self.risk_v @ self.along)
            self.bent |= left <= _LEAST_DENOMINATOR
            self.strength = gamma / left if left > _LEAST_DENOMINATOR else 0.0

    def pull(self, affine: _Direction | None, target: float) -> tuple[Array, Array]:
        """sigma mu - dS dZ of every pair; without the second-order term if `affine` is None."""
        goal = target * self.target[self.owner]
        wall = np.full((2, len(self.lower)), target * self.wall_target)
        if affine is None:
            return np.stack((goal, goal)), wall
        return goal - affine.slack * affine.dual, wall - affine.wall * affine.price

    def direction(
        self,
        state: _State,
        slope: Array,
        pull: tuple[Array, Array] | None,
        tolerance: float,
    ) -> _Direction:
        stage = slope.copy()
        barrier, wall_barrier = state.dual / state.slack, state.price / state.wall
        push, wall_push = (
            (np.zeros_like(state.slack), np.zeros_like(state.wall))
            if pull is None
            else (pull[0] / state.slack, pull[1] / state.wall)
        )
        stage[2] += push[1] - push[0]
        rho = self.coupling.levels(state.x, state.y) - state.level
        pushed = (wall_push[0] - wall_push[1]) / wall_barrier.sum(axis=0)
        right = -self.pull_back(stage)
        v, level = self.system.solve(right, tolerance, rho - pushed)
        if self.along is not None:
            amount = self.strength * float(self.risk_v @ v)
            v, level = v + amount * self.along, level + amount * self.along_level
        toward = self.flat.lift(v)
        slack = np.stack((toward[2], -toward[2]))
        level = level + pushed
        wall = np.stack((level, -level))
        return _Direction(
            toward,
            slack,
            push - state.dual - barrier * slack,
            level,
            wall,
            wall_push - state.price - wall_barrier * wall,
        )

    def reach(self, state: _State, move: _Direction) -> float:
        """Longest step at which every slack and dual stays positive."""
        pairs = (
            (move.slack, state.slack),
            (move.dual, state.dual),
            (move.wall, state.wall),
            (move.price, state.price),
        )
        nearest = min(float((change / value).min(initial=0.0)) for change, value in pairs)
        return 1.0 / max(-nearest, 1e-300)

    def complementarity_after(self, state: _State, move: _Direction, reach: float) -> float:
        return float(
            np.vdot(state.slack + reach * move.slack, state.dual + reach * move.dual)
            + np.vdot(state.wall + reach * move.wall, state.price + reach * move.price)
        )

    def stay_near_centre(self, state: _State, move: _Direction, reach: float) -> float:
        goal = self.target[self.owner]
        for _ in range(_BACKTRACKS):
            least = _NEIGHBOURHOOD * self.complementarity_after(state, move, reach)
            own = (state.slack + reach * move.slack) * (state.dual + reach * move.dual)
            wall = (state.wall + reach * move.wall) * (state.price + reach * move.price)
            if (own >= least * goal).all() and (wall >= least * self.wall_target).all():
                break
            reach *= 0.7
        return reach

    def move(self, state: _State, move: _Direction, reach: float) -> _State:
        return self.state(
            state.x + reach * move.toward[0],
            state.z + reach * move.toward[1],
            state.y + reach * move.toward[2],
            state.slack + reach * move.slack,
            state.dual + reach * move.dual,
            state.level + reach * move.level,
            state.wall + reach * move.wall,
            state.price + reach * move.price,
        )


@dataclass(frozen=True)
class _Direction:
    """Changes of a state: (3, M) of x, z, y, then of slacks, duals and corridors."""

    toward: Array
    slack: Array
    dual: Array
    level: Array
    wall: Array
    price: Array
