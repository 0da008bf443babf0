"""One conic programme, of a single order or of a list tied together, through cvxpy and CLARABEL.

States x, z and slices y of every bucket are variables:

    minimise  C + U sqrt(R) + lambda R,   |z_j|^{1+delta} <= t_j by power cones.

Without the terms x^2 |z|, R = |r|^2 is a sum of squares of affine terms, the exposures of a list to
its factors among them, so U sqrt(R) = U |r| is one second-order cone and lambda R a quadratic: no
outer loop is needed. In a list power cones cost CLARABEL its last three digits; wherever 1 + delta
is a fraction of small numbers they are towers of second-order cones there, as z^2 <= t s,
s^2 <= |z| for |z|^{3/2} <= t. x^2 |z| is not convex. By the inequality of arithmetic and geometric
means,

    x^2 |z| <= (x^4 / b + b z^2) / 2,   equal at b = x^2 / |z|,

which makes R a sum of squares again, of z_j and of s_j >= x_j^2. Each round solves with b from the
schedule before, so the objective cannot rise; the first starts from the optimum without the term.
The limit is a KKT point, as it is for the interior solvers.

What CLARABEL returns is put back inside the caps, and states, rows and objective are recomputed
from the slices alone before they are used or given out.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from scipy import sparse

from scheduler.coupling import Coupling
from scheduler.errors import InfeasibleError, NotConvergedError
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem
from scheduler.solve.evaluate import Evaluator
from scheduler.solve.linear import due, exposure_map, level_map
from scheduler.solve.rows import FreeRows, clash
from scheduler.solve.start import cold_start

_STALLED = 1e-10  # relative decrease that is no more than CLARABEL's error
_SETTLED = 1e-7  # gap at which no further round is wanted
_LEAST_X = 1e-4  # floors of x and |z| in b; what they add to x^2 |z| is below 5e-9
_LEAST_Z = 1e-8
_LEFT_OUT = 1e-8  # least terms x^2 |z| that together are below this part of R need no cones
_LONGEST = 1000  # denominator of an exponent that is made a tower of some 11 cones
_ROUNDING = 1e-6  # largest violation, in fractions of an order, that is put down to rounding
_SETTINGS = {"iterative_refinement_reltol": 1e-15, "iterative_refinement_abstol": 1e-15}
# each way stalls just short of the tolerance on some programs; of 400 orders, one in all three
_ATTEMPTS: tuple[dict[str, Any], ...] = (
    {},
    {"max_step_fraction": 0.95},
    {"equilibrate_enable": False},
)


@dataclass(frozen=True)
class Aim:
    """C + urgency sqrt(R) + risk_aversion R, R of all orders of a programme."""

    urgency: float
    risk_aversion: float


@dataclass(frozen=True)
class Round:
    """A schedule with CLARABEL's steps and multipliers; what it costs and risks is recomputed.

    fractions, ceiling_price : (M,). row_price (2, m), level_price (2, n + S) : of the lower and
    upper bounds of rows, and of corridors and spans. size : impact, lambda Var and what charges
    differ by: positive, what tolerances refer to.
    """

    fractions: Array
    ceiling_price: Array
    row_price: Array
    level_price: Array
    steps: int
    objective: float
    risk: float
    size: float


def rounds(
    program: Program, most_rounds: int, gap: Callable[[Round], float], patience: int = 0
) -> tuple[Round, int, bool]:
    """The best schedule, CLARABEL's iterations in all, and whether the rounds settled.

    Where the objective no longer falls by more than CLARABEL's error, the gap still may: `patience`
    rounds in a row are given to that.

    Parameters
    ----------
    gap : recomputed from the schedule, relative.
    """
    best = program.solve(None)
    steps, idle, near = best.steps, 0, np.inf
    if not program.fed:
        return best, steps, True
    for _ in range(most_rounds):
        try:
            rival = program.solve(best)
        except NotConvergedError:
            return best, steps, gap(best) <= _SETTLED
        steps += rival.steps
        decrease = (best.objective - rival.objective) / best.size
        if decrease > _STALLED:
            best, near = rival, np.inf
            continue
        near = min(near, gap(best))
        again = gap(rival)
        idle = 0 if again < 0.5 * near else idle + 1
        if again < near:
            best, near = rival, again
        if near <= _SETTLED or idle > patience:
            # of an optimum already found a round can but add CLARABEL's own error
            return best, steps, decrease >= -_SETTLED or near <= _SETTLED
    return best, steps, False


class Program:
    """Orders as cvxpy expressions."""

    def __init__(
        self,
        problem: Problem,
        aim: Aim,
        rows: FreeRows,
        tolerance: float,
        coupling: Coupling | None = None,
    ) -> None:
        import cvxpy as cp  # noqa: PLC0415

        self.problem, self.aim, self.rows, self.tolerance = problem, aim, rows, tolerance
        self.coupling = coupling
        buckets, share = problem.layout.entries, problem.node_share
        self.x_maps = _stacked(np.ones_like(share)), _stacked(share)
        self.z_maps = _stacked(problem.node_decay), _stacked(problem.node_gain)
        self.noisy = np.flatnonzero(problem.risk_weight.ravel() > 0.0)
        self.fed = bool((problem.feedback_weight > 0.0).any())
        self.unit = self.measured(cold_start(problem))[2]
        self.x, self.z, self.y = (cp.Variable(buckets) for _ in range(3))
        self.node_x = self.x_maps[0] @ self.x - self.x_maps[1] @ self.y
        self.node_z = self.z_maps[0] @ self.z + self.z_maps[1] @ self.y
        self.late = due(problem)
        self.ceiling = self.x[self.late] - self.y[self.late] <= problem.ceiling[self.late]
        self.kept = _Between(rows.matrix @ self.y, rows.lower, rows.upper)
        self.corridors, self.exposures = self._tied()
        self.limits = [
            *self._dynamics(),
            *self._caps(),
            self.ceiling,
            *self.kept.constraints,
            *self.corridors.constraints,
        ]
        self.cost = self._cost()

    def _dynamics(self) -> list[Any]:
        import cvxpy as cp  # noqa: PLC0415

        problem, x, z, y = self.problem, self.x, self.z, self.y
        first, last = problem.layout.first, problem.layout.last
        later = np.setdiff1d(np.arange(problem.layout.entries), first)
        before = later - 1
        decay, gain = problem.decay[before], problem.gain[before]
        return [
            x[first] == 1.0,
            z[first] == problem.initial,
            x[last] == y[last],
            x[later] == x[before] - y[before],
            z[later] == cp.multiply(decay, z[before]) + cp.multiply(gain, y[before]),
        ]

    def _caps(self) -> list[Any]:
        capped = self.problem.cap < 1.0
        return [self.y >= 0.0, self.y[capped] <= self.problem.cap[capped]]

    def _tied(self) -> tuple[_Between, list[Any]]:
        """Corridors, in parts of the largest gross, and the factors' exposures."""
        import cvxpy as cp  # noqa: PLC0415

        self.money = 1.0
        if self.coupling is None:
            return _Between(self.y[:0], np.zeros(0), np.zeros(0)), []
        state, buckets = cp.hstack((self.x, self.y)), self.problem.layout.entries
        level, constant = level_map(self.coupling, buckets)
        self.money = self.coupling.money
        lower, upper = ((bound - constant) / self.money for bound in self.coupling.bounds)
        corridors = _Between((level / self.money) @ state, lower, upper)
        if not self.coupling.loadings.shape[1]:
            return corridors, []
        matrix, fixed = exposure_map(self.coupling, buckets)
        return corridors, [matrix @ state + fixed]

    def _cost(self) -> Any:
        """C less its constant."""
        weight = self.problem.impact_weight.ravel()
        exponent = self.problem.exponent[self.problem.layout.owner]
        by_node = np.broadcast_to(exponent, self.problem.impact_weight.shape).ravel()
        cost = self.problem.charge @ self.y
        for value in np.unique(exponent):
            paid = np.flatnonzero((weight > 0.0) & (by_node == value))
            cost = cost + weight[paid] @ self._power(self.node_z[paid], float(value))
        return cost

    def _power(self, level: Any, exponent: float) -> Any:
        """t with |level|^{1+exponent} <= t."""
        import cvxpy as cp  # noqa: PLC0415

        power, whole = cp.Variable(level.shape), 1.0 + exponent
        if self.coupling is not None and _is_short_fraction(whole):
            towers = cp.power(cp.abs(level), whole, approx=True, max_denom=_LONGEST)
            self.limits.append(towers <= power)
        else:
            one, root = np.ones(level.shape), np.full(level.shape, 1.0 / whole)
            self.limits.append(cp.PowCone3D(power, one, level, root))
        return power

    def solve(self, before: Round | None) -> Round:
        """The optimum with x^2 |z| majorised at an earlier schedule, or without it if None."""
        import cvxpy as cp  # noqa: PLC0415

        deviation, limits = self._deviation(before)
        value = self.cost
        if self.aim.urgency > 0.0:
            value = value + self.aim.urgency * cp.norm(deviation)
        if self.aim.risk_aversion > 0.0:
            value = value + self.aim.risk_aversion * cp.sum_squares(deviation)
        program = cp.Problem(cp.Minimize(value / self.unit), [*self.limits, *limits])
        self._run(program)
        fractions = self._inside(self.y.value)
        price = np.zeros(len(fractions))
        price[self.late] = np.maximum(self.ceiling.dual_value, 0.0) * self.unit
        return Round(
            fractions,
            price,
            self.kept.prices() * self.unit,
            self.corridors.prices() * (self.unit / self.money),
            int(program.solver_stats.num_iters),
            *self.measured(fractions),
        )

    def _deviation(self, before: Round | None) -> tuple[Any, list[Any]]:
        """r with R <= |r|^2, equal at the schedule before, and the cones s_j >= x_j^2."""
        import cvxpy as cp  # noqa: PLC0415

        problem = self.problem
        weight = np.sqrt(problem.risk_weight.ravel()[self.noisy])
        parts = [
            cp.multiply(weight, self.node_x[self.noisy]),
            np.sqrt(problem.constant_risk),
            *self.exposures,
        ]
        if before is None:
            return cp.hstack(parts), []
        weight = problem.feedback_weight.ravel()
        x, z = self._nodes(before.fractions)
        which = _all_but_least(weight * x * x * z, _LEFT_OUT * before.risk)
        x, z = np.maximum(x[which], _LEAST_X), np.maximum(z[which], _LEAST_Z)
        # of the two squares w x^4 / (2 b) and w b z^2 / 2; s stands for x_j^2 / (x_j before)
        of_square = np.sqrt(0.5 * weight[which] * z)
        of_level = np.sqrt(0.5 * weight[which] / z) * x
        square = cp.Variable(len(which))
        parts += [cp.multiply(of_square, square), cp.multiply(of_level, self.node_z[which])]
        cones = cp.square(cp.multiply(1.0 / np.sqrt(x), self.node_x[which])) <= square
        return cp.hstack(parts), [cones]

    def _states(self, fractions: Array) -> tuple[Array, Array]:
        """x and z before each bucket."""
        problem, layout = self.problem, self.problem.layout
        x = layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size)))
        after = layout.scan(problem.decay, problem.gain * fractions, problem.initial)
        return x, layout.before(after, problem.initial)

    def _nodes(self, fractions: Array) -> tuple[Array, Array]:
        """x and |z| at all nodes."""
        x, z = self._states(fractions)
        node_x = self.x_maps[0] @ x - self.x_maps[1] @ fractions
        return node_x, np.abs(self.z_maps[0] @ z + self.z_maps[1] @ fractions)

    def measured(self, fractions: Array) -> tuple[float, float, float]:
        """Objective, R, and the size that tolerances refer to."""
        x, z = self._states(fractions)
        point = Evaluator(self.problem).point(x, z, fractions)
        risk = float(point.risk.sum())
        if self.coupling is not None:
            risk += float((self.coupling.exposures(x, fractions) ** 2).sum())
        urgency, aversion = self.aim.urgency, self.aim.risk_aversion
        implied = aversion + (0.5 * urgency / np.sqrt(risk) if risk > 0.0 else 0.0)
        value = float(point.cost.sum()) + urgency * np.sqrt(max(risk, 0.0)) + aversion * risk
        return value, risk, float(point.avoidable.sum()) + implied * abs(risk)

    def _run(self, program: Any) -> None:
        """Solve, or raise with what is known about the failure."""
        import cvxpy as cp  # noqa: PLC0415

        tolerance = self.tolerance
        # of a list CLARABEL often stops short of its tolerance: its gap, recomputed, decides
        enough = [cp.OPTIMAL, *([cp.OPTIMAL_INACCURATE] if self.coupling is not None else [])]
        gaps = {"tol_gap_abs": tolerance, "tol_gap_rel": tolerance, "tol_feas": tolerance}
        for attempt in _ATTEMPTS:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # inaccurate solutions are refused below
                try:
                    program.solve(cp.CLARABEL, ignore_dpp=True, **gaps, **_SETTINGS, **attempt)
                    status = program.status
                except cp.error.SolverError:
                    status = "numerical failure"
            if status in enough:
                return
            if status in (cp.INFEASIBLE, cp.INFEASIBLE_INACCURATE):
                break
        self._explain(program, status)

    def _inside(self, given: Array) -> Array:
        """Fractions moved into [0, cap] and to the sum 1, if all limits were kept but for rounding.

        Ceilings, rows and corridors are checked afterwards: they are kept to the solver's
        tolerance.
        """
        problem, layout = self.problem, self.problem.layout
        cap = np.minimum(problem.cap, 1.0)
        fractions: Array = np.clip(given, 0.0, cap)
        moved = np.abs(given - fractions).max()
        missing = 1.0 - layout.sum(fractions)
        room = cap - fractions
        lift = np.maximum(missing, 0.0) / np.maximum(layout.sum(room), 1e-300)
        shrink = 1.0 / (1.0 - np.minimum(missing, 0.0))
        fractions = (fractions + lift[layout.owner] * room) * shrink[layout.owner]
        left = 1.0 - layout.cumsum(fractions)
        late = (left - problem.ceiling)[self.late].max(initial=0.0)
        worst = max(
            moved,
            np.abs(missing).max(),
            late,
            self.rows.violation(fractions),
            self._outside(fractions),
        )
        if worst > _ROUNDING:
            raise NotConvergedError(
                f"CLARABEL calls a schedule optimal that breaks a limit by {worst:.1e} of the "
                "order or list; try a smaller tolerance"
            )
        return fractions

    def _outside(self, fractions: Array) -> float:
        """Largest distance to a corridor, in parts of the largest gross."""
        if self.coupling is None:
            return 0.0
        lower, upper = self.coupling.bounds
        level = self.coupling.levels(self._states(fractions)[0], fractions)
        return float(np.maximum(lower - level, level - upper).max(initial=0.0)) / self.money

    def _explain(self, program: Any, status: str) -> None:
        reason = clash(self.problem, self.rows, self.coupling)
        if reason:
            raise InfeasibleError(reason)
        data = program.get_problem_data("CLARABEL", ignore_dpp=True)[0]
        matrix = data["A"]
        size = np.abs(matrix.data[matrix.data != 0.0])
        raise NotConvergedError(
            f"CLARABEL ended with {status!r} at tolerance {self.tolerance:g}: "
            f"{matrix.shape[1]} variables, {matrix.shape[0]} constraints, coefficients from "
            f"{size.min():.1e} to {size.max():.1e}; try a tolerance ten times larger, or the "
            "interior solver if there are no further rows"
        )


class _Between:
    """lower <= level <= upper as constraints; equal bounds are one equality."""

    def __init__(self, level: Any, lower: Array, upper: Array) -> None:
        self.count = len(lower)
        fixed = lower == upper
        self.equal = np.flatnonzero(fixed)
        self.above = np.flatnonzero(np.isfinite(lower) & ~fixed)
        self.below = np.flatnonzero(np.isfinite(upper) & ~fixed)
        self.constraints = [
            level[self.equal] == lower[self.equal],
            level[self.above] >= lower[self.above],
            level[self.below] <= upper[self.below],
        ]

    def prices(self) -> Array:
        """(2, count) multipliers of lower and upper bounds, after a solve; never below 0."""
        equal, above, below = (np.asarray(c.dual_value, dtype=float) for c in self.constraints)
        result = np.zeros((2, self.count))
        result[0, self.equal], result[1, self.equal] = -equal, equal
        result[0, self.above], result[1, self.below] = above, below
        return np.maximum(result, 0.0)


def _is_short_fraction(number: float) -> bool:
    return abs(float(Fraction(number).limit_denominator(_LONGEST)) - number) < 1e-12


def _all_but_least(terms: Array, total: float) -> Index:
    """Positions of all terms but the smallest, whose sum is at most `total`."""
    ranked = np.argsort(terms)
    return np.sort(ranked[np.cumsum(terms[ranked]) > total])


def _stacked(by_node: Array) -> Any:
    """(J M, M) sparse map: entries of a bucket times (J, M) coefficients."""
    return sparse.vstack([sparse.diags(row) for row in by_node], format="csr")
