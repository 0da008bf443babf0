"""The same problem through cvxpy and CLARABEL: the reference, and the way in for further rows.

One conic problem an order, states x, z and slices y as variables:

    minimise  C + U sqrt(R) + lambda R,   |z_j|^{1+delta} <= t_j by power cones.

Without the term x^2 |z|, R = |r|^2 is a sum of squares of affine terms, so U sqrt(R) = U |r| is one
second-order cone and lambda R a quadratic: no outer loop is needed. x^2 |z| is not convex. By
the inequality of arithmetic and geometric means,

    x^2 |z| <= (x^4 / b + b z^2) / 2,   equal at b = x^2 / |z|,

which makes R a sum of squares again, of z_j and of s_j >= x_j^2. Each round solves with b from the
schedule before, so the objective cannot rise; the first starts from the optimum without the term.
The limit is a KKT point, as it is for `scheduler.solve.interior`.

What CLARABEL returns is put back inside the caps, and states, rows and objective are recomputed
from the slices alone before they are used or given out.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy import sparse

from scheduler.errors import InfeasibleError, NotConvergedError
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem
from scheduler.solve.interior import Solution
from scheduler.solve.optimality import Parts, duality_gap, objective, objective_parts
from scheduler.solve.rows import OrderRows, Row, by_order, clash
from scheduler.solve.start import cold_start

__all__ = ["Row", "solve"]

_STALLED = 1e-10  # relative decrease at which the rounds end
_LEAST_X = 1e-4  # floors of x and |z| in b; what they add to x^2 |z| is below 5e-9
_LEAST_Z = 1e-8
_LEFT_OUT = 1e-8  # least terms x^2 |z| that together are below this part of R need no cones
_ROUNDING = 1e-6  # largest violation, in fractions of the order, that is put down to rounding
_SETTINGS = {"iterative_refinement_reltol": 1e-15, "iterative_refinement_abstol": 1e-15}
# each way stalls just short of the tolerance on some programs; of 400 orders, one in all three
_ATTEMPTS: tuple[dict[str, Any], ...] = (
    {},
    {"max_step_fraction": 0.95},
    {"equilibrate_enable": False},
)


def solve(
    problem: Problem,
    *,
    rows: tuple[Row, ...] = (),
    feedback: bool = True,
    tolerance: float = 1e-8,
    most_rounds: int = 30,
) -> Solution:
    """Solve every order, one conic problem each; `iterations` are CLARABEL's, over all rounds.

    Parameters
    ----------
    rows : further linear limits, each on one order.
    feedback : whether the order's own imbalance adds to the variance.
    tolerance : CLARABEL's, on the relative gap and on violations in fractions of the order.
    most_rounds : rounds of majorisation; an order that needs more is not marked as converged.

    Raises
    ------
    InfeasibleError : limits that clash; rows by name.
    NotConvergedError : CLARABEL ends in another state than `optimal`.
    """
    count = len(problem.quantity)
    fractions, price = np.empty(problem.layout.entries), np.empty(problem.layout.entries)
    iterations, converged = np.zeros(count, dtype=np.int64), np.zeros(count, dtype=np.bool_)
    for order, limits in enumerate(by_order(problem, rows)):
        part = problem.take(np.array([order]))
        if not feedback:
            part = replace(part, feedback_weight=np.zeros_like(part.feedback_weight))
        found, steps, settled = _rounds(_Program(part, limits, tolerance), most_rounds)
        at = slice(problem.layout.first[order], problem.layout.last[order] + 1)
        fractions[at], price[at] = found.fractions, found.ceiling_price
        iterations[order], converged[order] = steps, settled
    return Solution(fractions, price, iterations, converged)


@dataclass(frozen=True)
class _Round:
    """A schedule with what CLARABEL says about it, and its exact `objective` and `parts`."""

    fractions: Array
    ceiling_price: Array
    steps: int
    parts: Parts
    objective: float

    @property
    def size(self) -> float:
        """Impact, lambda Var and what charges differ by: positive, what tolerances refer to."""
        return float(self.parts.size[0])


def _rounds(program: _Program, most_rounds: int) -> tuple[_Round, int, bool]:
    """The last schedule, CLARABEL's iterations in all, and whether the rounds settled."""
    best = program.solve(None)
    steps = best.steps
    if not program.fed:
        return best, steps, True
    for _ in range(most_rounds):
        rival = program.solve(best)
        steps += rival.steps
        decrease = best.objective - rival.objective
        if decrease > 0.0:
            best = rival
        if decrease <= _STALLED * best.size:
            allowed = 10.0 * program.tolerance * best.size
            # of an optimum already found a round can but add CLARABEL's own error
            return best, steps, decrease >= -allowed or program.gap(best) <= allowed
    return best, steps, False


class _Program:
    """One order as cvxpy expressions."""

    def __init__(self, problem: Problem, rows: OrderRows, tolerance: float) -> None:
        import cvxpy as cp  # noqa: PLC0415

        self.problem, self.rows, self.tolerance = problem, rows, tolerance
        buckets, share = problem.layout.entries, problem.node_share
        self.x_maps = _stacked(np.ones_like(share)), _stacked(share)
        self.z_maps = _stacked(problem.node_decay), _stacked(problem.node_gain)
        self.noisy = np.flatnonzero(problem.risk_weight.ravel() > 0.0)
        self.fed = bool((problem.feedback_weight > 0.0).any())
        self.unit = float(objective_parts(problem, cold_start(problem)).size[0])
        self.y = cp.Variable(buckets)
        self.x, self.z = cp.Variable(buckets + 1), cp.Variable(buckets + 1)
        self.node_x = self.x_maps[0] @ self.x[:-1] - self.x_maps[1] @ self.y
        self.node_z = self.z_maps[0] @ self.z[:-1] + self.z_maps[1] @ self.y
        self.due = np.flatnonzero(problem.ceiling[:-1] < 1.0)
        self.ceiling = self.x[1:][self.due] <= problem.ceiling[self.due]
        self.limits = [*self._dynamics(), *self._bounds(), self.ceiling]
        self.cost = self._cost()

    def _dynamics(self) -> list[Any]:
        import cvxpy as cp  # noqa: PLC0415

        problem, x, z, y = self.problem, self.x, self.z, self.y
        return [
            x[0] == 1.0,
            x[-1] == 0.0,
            x[1:] == x[:-1] - y,
            z[0] == problem.initial[0],
            z[1:] == cp.multiply(problem.decay, z[:-1]) + cp.multiply(problem.gain, y),
        ]

    def _bounds(self) -> list[Any]:
        rows, level = self.rows, self.rows.matrix @ self.y
        fixed = rows.lower == rows.upper
        above, below = np.isfinite(rows.lower) & ~fixed, np.isfinite(rows.upper) & ~fixed
        capped = self.problem.cap < 1.0
        return [
            self.y >= 0.0,
            self.y[capped] <= self.problem.cap[capped],
            level[fixed] == rows.lower[fixed],
            level[above] >= rows.lower[above],
            level[below] <= rows.upper[below],
        ]

    def _cost(self) -> Any:
        """C less its constant; t^{1/(1+delta)} >= |z| for each node."""
        import cvxpy as cp  # noqa: PLC0415

        weight = self.problem.impact_weight.ravel()
        paid = np.flatnonzero(weight > 0.0)
        power, one = cp.Variable(len(paid)), np.ones(len(paid))
        root = one / (1.0 + self.problem.exponent[0])
        self.limits.append(cp.PowCone3D(power, one, self.node_z[paid], root))
        return weight[paid] @ power + self.problem.charge @ self.y

    def solve(self, before: _Round | None) -> _Round:
        """The optimum with x^2 |z| majorised at an earlier schedule, or without it if None."""
        import cvxpy as cp  # noqa: PLC0415

        deviation, limits = self._deviation(before)
        value = self.cost
        if self.problem.urgency[0] > 0.0:
            value = value + self.problem.urgency[0] * cp.norm(deviation)
        if self.problem.risk_aversion[0] > 0.0:
            value = value + self.problem.risk_aversion[0] * cp.sum_squares(deviation)
        program = cp.Problem(cp.Minimize(value / self.unit), [*self.limits, *limits])
        self._run(program)
        fractions = self._inside(self.y.value)
        price = np.zeros(len(fractions))
        price[self.due] = np.maximum(self.ceiling.dual_value, 0.0) * self.unit
        steps = int(program.solver_stats.num_iters)
        parts = objective_parts(self.problem, fractions)
        return _Round(fractions, price, steps, parts, float(objective(self.problem, parts)[0]))

    def _deviation(self, before: _Round | None) -> tuple[Any, list[Any]]:
        """r with R <= |r|^2, equal at the schedule before, and the cones s_j >= x_j^2."""
        import cvxpy as cp  # noqa: PLC0415

        problem = self.problem
        weight = np.sqrt(problem.risk_weight.ravel()[self.noisy])
        parts = [
            cp.multiply(weight, self.node_x[self.noisy]),
            np.sqrt(problem.constant_risk),
        ]
        if before is None:
            return cp.hstack(parts), []
        weight = problem.feedback_weight.ravel()
        x, z = self._nodes(before.fractions)
        which = _all_but_least(weight * x * x * z, _LEFT_OUT * before.parts.point.risk[0])
        x, z = np.maximum(x[which], _LEAST_X), np.maximum(z[which], _LEAST_Z)
        # of the two squares w x^4 / (2 b) and w b z^2 / 2; s stands for x_j^2 / (x_j before)
        of_square = np.sqrt(0.5 * weight[which] * z)
        of_level = np.sqrt(0.5 * weight[which] / z) * x
        square = cp.Variable(len(which))
        parts += [cp.multiply(of_square, square), cp.multiply(of_level, self.node_z[which])]
        cones = cp.square(cp.multiply(1.0 / np.sqrt(x), self.node_x[which])) <= square
        return cp.hstack(parts), [cones]

    def _nodes(self, fractions: Array) -> tuple[Array, Array]:
        """x and |z| at all nodes."""
        problem, layout = self.problem, self.problem.layout
        left = layout.before(1.0 - layout.cumsum(fractions), np.ones(1))
        after = layout.scan(problem.decay, problem.gain * fractions, problem.initial)
        state = layout.before(after, problem.initial)
        x = self.x_maps[0] @ left - self.x_maps[1] @ fractions
        return x, np.abs(self.z_maps[0] @ state + self.z_maps[1] @ fractions)

    def gap(self, found: _Round) -> float:
        """The duality gap, recomputed; of the order without its rows, so never too small."""
        gap = duality_gap(self.problem, found.parts, found.fractions, found.ceiling_price)
        return float(gap[0])

    def _run(self, program: Any) -> None:
        """Solve, or raise with what is known about the failure."""
        import cvxpy as cp  # noqa: PLC0415

        tolerance = self.tolerance
        gaps = {"tol_gap_abs": tolerance, "tol_gap_rel": tolerance, "tol_feas": tolerance}
        for attempt in _ATTEMPTS:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # inaccurate solutions are refused below
                try:
                    program.solve(cp.CLARABEL, ignore_dpp=True, **gaps, **_SETTINGS, **attempt)
                    status = program.status
                except cp.error.SolverError:
                    status = "numerical failure"
            if status == cp.OPTIMAL:
                return
            if status in (cp.INFEASIBLE, cp.INFEASIBLE_INACCURATE):
                break
        self._explain(program, status)

    def _inside(self, given: Array) -> Array:
        """Fractions moved into [0, cap] and to the sum 1, if all limits were kept but for rounding.

        Ceilings and rows are checked afterwards: they are kept to the solver's tolerance.
        """
        problem = self.problem
        cap = np.minimum(problem.cap, 1.0)
        fractions: Array = np.clip(given, 0.0, cap)
        moved = np.abs(given - fractions).max()
        missing, room = 1.0 - fractions.sum(), cap - fractions
        if missing > 0.0:
            fractions = fractions + missing * room / room.sum()
        else:
            fractions = fractions / (1.0 - missing)
        left = 1.0 - np.cumsum(fractions)
        late = (left - problem.ceiling)[self.due].max(initial=0.0)
        worst = max(moved, abs(missing), late, self.rows.violation(fractions))
        if worst > _ROUNDING:
            raise NotConvergedError(
                f"CLARABEL calls a schedule optimal that breaks a limit by {worst:.1e} of the "
                "order; try a smaller tolerance"
            )
        return fractions

    def _explain(self, program: Any, status: str) -> None:
        reason = clash(self.problem, self.rows)
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


def _all_but_least(terms: Array, total: float) -> Index:
    """Positions of all terms but the smallest, whose sum is at most `total`."""
    ranked = np.argsort(terms)
    return np.sort(ranked[np.cumsum(terms[ranked]) > total])


def _stacked(by_node: Array) -> Any:
    """(J M, M) sparse map: entries of a bucket times (J, M) coefficients."""
    return sparse.vstack([sparse.diags(row) for row in by_node], format="csr")
