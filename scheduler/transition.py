"""A list planned as one: common factor risk, corridors, one price of risk, one certificate."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import pandas as pd

from scheduler.clock import Clock, common_clock
from scheduler.coupling import AFTER, BEFORE, Coupling
from scheduler.errors import InfeasibleError, InputError, MisuseError, NotConvergedError
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.problem import Orders, Problem, assemble
from scheduler.riskmodel import RiskModel, from_exposures, from_returns
from scheduler.sessions import resolve
from scheduler.solve import joint
from scheduler.solve.feasible import reach
from scheduler.solve.joint_certificate import JointCertificate, certify
from scheduler.solve.joint_feasible import smallest_violation
from scheduler.solve.joint_global import best_of_starts, lower_bound
from scheduler.solve.list_lots import keep_corridors
from scheduler.solve.polish import polish
from scheduler.solve.slices import rounded
from scheduler.solve.windows import divide, pools_of, spans_of, windows
from scheduler.tables.corridors import Limits, limits
from scheduler.tables.inputs import Inputs

_BPS = 1e-4
_KEPT = 1e-9  # of the gross value: a corridor broken by less holds
_TIGHT = 1e-6  # caps that suffice by less than this have no room inside
_ROOM = 1e-7  # of the gross value: what softened corridors are given beyond the least


@dataclass(frozen=True)
class Transition:
    """A book whose orders share factor risk and corridors, those of a symbol being one.

    risk : factor model, or None where every name's risk is its own. measures : corridors' labels,
    in the order of the coupling's rows. unit : money that solver figures are in.
    """

    book: Book
    risk: RiskModel | None
    measures: tuple[str, ...]
    orders: Orders
    problem: Problem
    clock: Clock
    coupling: Coupling
    unit: float
    notes: tuple[str, ...]

    def asking(self, urgency: float) -> Transition:
        """The same list at another urgency."""
        arrays = self.book.arrays
        aim = np.full(len(arrays), urgency), np.zeros(len(arrays))
        return replace(self, book=replace(self.book, arrays=arrays.asking(*aim)))

    @cached_property
    def value(self) -> Array:
        """(N,) s p fx Q, base currency."""
        return signed_value(self.book)

    @cached_property
    def working(self) -> Array:
        """(N,) the part of `value` that can trade: what the coupling's x is of."""
        result: Array = self.value * self.problem.quantity / self.book.arrays.quantity
        return result

    def left(self, shares: Array) -> Array:
        """(N, T) fraction of each order left at the end of each interval of the clock."""
        part = self.problem.quantity / self.book.arrays.quantity
        result: Array = self.working_left(shares) * part[:, None]
        return result

    def working_left(self, shares: Array) -> Array:
        """(N, T) the same of what can trade, residuals on top."""
        fractions = self.problem.fractions(shares)
        layout, coupling = self.problem.layout, self.coupling
        x = layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size)))
        inside = (x[coupling.at] - coupling.end * fractions[coupling.at]) * coupling.inside
        return inside + coupling.untouched


@dataclass(frozen=True)
class Solved:
    """(M,) shares before rounding, the certificate, and what was given way to.

    certificate : in units of `Transition.unit`. seconds are the caller's to take. bound : where the
    list is not convex, the relative distance to a lower bound; inf if none was found.
    """

    shares: Array
    certificate: JointCertificate
    iterations: int
    gradient_steps: int
    notes: tuple[str, ...]
    bound: float | None = None


def is_list(inputs: Inputs) -> bool:
    """Whether something ties the orders together."""
    return any(table is not None for table in (inputs.exposures, inputs.returns, inputs.corridors))


def signed_value(book: Book) -> Array:
    """s p fx Q of each order, base currency."""
    side = book.rows["side"].to_numpy(dtype=float)
    result: Array = side * book.arrays.quantity * book.arrays.market.price
    return result


def link(book: Book, inputs: Inputs, *, soften: bool = False) -> Transition:
    """Tie a book's orders together by its risk table and corridors, pools as one order.

    Raises:
        InputError: exposures or returns that do not fit the market table.
        InfeasibleError: a corridor that excludes a value nobody can change.
    """
    _check_supported(book)
    members, book = book.arrays, book.pooled
    risk, notes = _risk_model(book, inputs)
    quantity = np.minimum(reach(book.arrays).most, book.arrays.quantity)
    part = quantity / book.arrays.quantity
    value = signed_value(book) * part
    vol = book.arrays.market.vol
    specific = np.ones(len(value)) if risk is None else risk.specific / vol**2
    none = np.zeros(len(value))
    orders = replace(
        book.arrays,
        quantity=quantity,
        residual=book.arrays.quantity - quantity,
        specific=specific,
        urgency=none,
        risk_aversion=none,
        cap=_with_room(book),
        ceiling=np.full_like(book.arrays.ceiling, np.inf),  # they are spans here
    )
    unit = _BPS * float(np.abs(signed_value(book)).sum())
    problem = assemble(orders).in_unit(unit)
    clock = common_clock(book.grids, problem)
    found = _limits(book, inputs)
    rows, constant = _corridor_rows(book, risk, found)
    rows = rows * part  # of a unit of x, which is of what can trade
    lower, upper = _windows(book, inputs, clock, found)
    loadings = np.empty((len(value), 0)) if risk is None else value[:, None] * risk.orthonormal()
    coupling = Coupling(
        bucket=clock.bucket,
        begin=clock.begin,
        end=clock.done,
        weight=clock.weight,
        loadings=loadings,
        rows=rows,
        constant=constant,
        lower=lower,
        upper=upper,
        spans=spans_of(windows(members), problem),
        residual=problem.residual,
    )
    measures = tuple(
        f"{measure}:{name}" if name else measure
        for measure, name in zip(found.measure, found.name, strict=True)
    )
    coupling, gone = _without_fixed(book, clock, coupling, measures)
    if gone and not soften:
        raise InfeasibleError("\n".join((*gone, "widen it, end it earlier, or use --soften")))
    notes = (*notes, *(f"softened: {line}" for line in gone))
    return Transition(
        book, risk, measures, orders, problem, clock, coupling.scaled(unit), unit, notes
    )


def _with_room(book: Book) -> Array:
    """Caps, by a millionth wider where they only just suffice: the solver needs room inside them.

    Whole lots are cut to the caps as they are.
    """
    layout, cap = book.layout, book.arrays.cap
    quantity = book.arrays.quantity
    total = layout.sum(np.minimum(cap, quantity[layout.owner]))
    tight = total < quantity * (1.0 + _TIGHT)
    return np.where(tight[layout.owner], cap * (1.0 + 2.0 * _TIGHT), cap)


def _check_supported(book: Book) -> None:
    plan = book.settings.plan
    asked = {
        "solver conic with shares that caps leave undone": plan.solver == "conic"
        and bool((reach(book.arrays).most < book.arrays.quantity * (1.0 - _TIGHT)).any()),
        "min_slice": bool((book.min_slice > 0.0).any()),
        "solver conic with a budget": plan.solver == "conic"
        and (plan.risk_budget is not None or plan.cost_budget is not None),
    }
    found = [name for name, given in asked.items() if given]
    if found:
        raise MisuseError(
            f"{', '.join(found)} cannot be combined with a risk table or corridors yet; plan these "
            "orders alone, or leave it out"
        )


def _risk_model(book: Book, inputs: Inputs) -> tuple[RiskModel | None, tuple[str, ...]]:
    symbols = book.rows["symbol"].tolist()
    vol = book.arrays.market.vol
    if inputs.exposures is not None and inputs.factor_covariance is not None:
        return from_exposures(inputs.exposures, inputs.factor_covariance, symbols, vol)
    if inputs.returns is not None:
        return from_returns(inputs.returns, symbols, vol, date=book.date)
    return None, ()


def _limits(book: Book, inputs: Inputs) -> Limits:
    if inputs.corridors is None:
        return Limits((), (), np.empty(0), np.empty(0))
    return limits(inputs.corridors.frame, float(np.abs(signed_value(book)).sum()))


def _corridor_rows(book: Book, risk: RiskModel | None, found: Limits) -> tuple[Array, Array]:
    """(R, N) weights of x, (R,) constants: cash is of what has been traded, others of the rest."""
    value = signed_value(book)
    rows, constant = np.zeros((len(found.measure), len(value))), np.zeros(len(found.measure))
    for row, (measure, name) in enumerate(zip(found.measure, found.name, strict=True)):
        rows[row] = measure_weights(book, risk, measure, name)
        if measure == "cash":
            constant[row] = value.sum()
    return rows, constant


def measure_weights(book: Book, risk: RiskModel | None, measure: str, name: str) -> Array:
    """(N,) what a unit of x adds to a measure, base currency."""
    value = signed_value(book)
    if measure == "cash":
        return -value
    if measure == "gross":
        return np.abs(value)
    if measure == "group":
        return np.where((book.rows["group"] == name).to_numpy(), value, 0.0)
    if measure == "factor":
        assert risk is not None
        exposure: Array = risk.exposures[:, risk.factors.index(name)] * value
        return exposure
    return value


def _windows(book: Book, inputs: Inputs, clock: Clock, found: Limits) -> tuple[Array, Array]:
    """(R, T) bounds at the end of each interval, none outside a corridor's from and to."""
    shape = (len(found.measure), len(clock.end))
    lower = np.broadcast_to(found.lower[:, None], shape).copy()
    upper = np.broadcast_to(found.upper[:, None], shape).copy()
    if inputs.corridors is None:
        return lower, upper
    calendar = str(book.rows["calendar"].iat[0])
    frame = inputs.corridors.frame
    for row, (begin, end) in enumerate(zip(frame["from"], frame["to"], strict=True)):
        outside = np.zeros(len(clock.end), dtype=np.bool_)
        if begin is not None:
            outside |= clock.end < resolve(begin, date=book.date, calendar=calendar).value
        if end is not None:
            outside |= clock.end > resolve(end, date=book.date, calendar=calendar).value
        if outside.all():
            mask = np.arange(len(frame)) == row
            rule = "holds at no bucket's end: its window misses the list's"
            raise InputError(inputs.corridors.problems(mask, "kind", rule, "check its from and to"))
        lower[row, outside], upper[row, outside] = -np.inf, np.inf
    return lower, upper


def _without_fixed(
    book: Book, clock: Clock, coupling: Coupling, measures: tuple[str, ...]
) -> tuple[Coupling, list[str]]:
    """Drop bounds where nobody can move the level; a line for each that does not hold there."""
    still = (coupling.bucket == AFTER) | (coupling.bucket == BEFORE)
    last = coupling.bucket == _last_buckets(coupling)[:, None]
    still |= last & (coupling.end >= 1.0)
    fixed = still.all(axis=0)
    level = coupling.rows @ coupling.untouched + coupling.constant[:, None]
    gross = float(np.abs(signed_value(book)).sum())
    lower, upper = coupling.lower.copy(), coupling.upper.copy()
    broken = np.maximum(lower - level, level - upper) > _KEPT * gross
    lines = {
        row: f"corridor {measures[row]}: at {_time(book, clock.end[interval])} it is "
        f"{level[row, interval]:,.0f} whatever the schedule, outside "
        f"{_range(lower[row, interval], upper[row, interval])}"
        for row, interval in zip(*np.nonzero(broken & fixed), strict=True)
    }
    lower[:, fixed], upper[:, fixed] = -np.inf, np.inf
    return replace(coupling, lower=lower, upper=upper), list(lines.values())


def _last_buckets(coupling: Coupling) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    result: np.ndarray[tuple[int], np.dtype[np.int64]] = coupling.bucket.max(axis=1)
    return result


def solve_list(transition: Transition, *, soften: bool = False) -> Solved:
    """Solve the list.

    Raises:
        InfeasibleError: corridors that no schedule keeps: which, when, and by how much at least.
        NotConvergedError: the solver stopped short of its tolerance.
    """
    urgency, risk_aversion = _aim(transition)
    coupling = transition.coupling
    notes: tuple[str, ...] = ()
    solution = joint_solution(transition, urgency, risk_aversion)
    if not solution.converged and len(coupling.limited[0]):
        transition, notes = softened(transition, soften=soften)
        coupling = transition.coupling
        if notes:
            solution = joint_solution(transition, urgency, risk_aversion)
    if not solution.converged:
        raise NotConvergedError(
            f"the list's solver stopped at a gap of {solution.gap:.1e}; try the other --solver, "
            "longer buckets, wider corridors or a lower urgency"
        )
    certificate = _certified(transition, solution)
    bound = None
    if not certificate.convex.all() and transition.book.settings.plan.solver == "interior":
        solution = best_of_starts(
            transition.problem,
            coupling,
            solution,
            urgency=urgency,
            risk_aversion=risk_aversion,
        )
        certificate = _certified(transition, solution)
        if not certificate.convex.all():
            bound = _distance_to_bound(transition, solution, certificate)
    problem, entries = transition.problem, transition.book.layout.entries
    return Solved(
        problem.shares(np.clip(solution.fractions, 0.0, problem.cap), entries),
        certificate,
        solution.iterations,
        solution.gradient_steps,
        notes,
        bound,
    )


def _certified(transition: Transition, solution: joint.JointSolution) -> JointCertificate:
    urgency, risk_aversion = _aim(transition)
    return certify(
        transition.problem,
        transition.coupling,
        np.clip(solution.fractions, 0.0, transition.problem.cap),
        urgency=urgency,
        risk_aversion=risk_aversion,
        lower_price=solution.lower_price,
        upper_price=solution.upper_price,
        row_price=solution.row_price,
    )


def _distance_to_bound(
    transition: Transition, solution: joint.JointSolution, certificate: JointCertificate
) -> float:
    """How far C + lambda R is above a bound on its minimum, relative to impact and lambda Var."""
    price, problem = certificate.risk_aversion, transition.problem
    fractions = np.clip(solution.fractions, 0.0, problem.cap)
    least = lower_bound(problem, transition.coupling, price, fractions)
    value = certificate.cost + price * certificate.risk
    return max(0.0, value - least) / certificate.size


def in_lots(transition: Transition, members: Orders, solved: Solved, lot: Array) -> Array:
    """(M,) slices of the orders in whole lots, moved where that keeps a corridor.

    Orders that share a state stay where they are: their windows decide.
    """
    book, problem, pools = transition.book, transition.problem, pools_of(members)
    shares = rounded(members, divide(members, solved.shares), lot)
    totals, free = pools.by_stage(shares), problem.bucket
    totals[free] = keep_corridors(
        problem.layout,
        transition.coupling,
        solved.shares[free],
        totals[free],
        book.arrays.cap[free],
        problem.quantity,
        book.lot,
        least=_least_traded(book)[free],
        movable=pools.count == 1,
    )
    alone = np.logical_not(pools.joined)[members.stages.layout.owner]
    return np.where(alone, totals[pools.place], shares)


def _least_traded(book: Book) -> Array:
    """(M,) shares that ceilings ask to have been traded after each stage."""
    quantity = book.arrays.quantity[book.layout.owner]
    result: Array = quantity - np.minimum(book.arrays.ceiling, quantity)
    return result


def _aim(transition: Transition) -> tuple[float, float]:
    """U and lambda of the list, lambda in the solver's unit."""
    arrays = transition.book.arrays
    return float(arrays.urgency[0]), float(arrays.risk_aversion[0]) * transition.unit


def joint_solution(
    transition: Transition, urgency: float, risk_aversion: float, start: Array | None = None
) -> joint.JointSolution:
    """The solver's answer, which may not have converged; the conic one has no use for a start."""
    problem, coupling, price = transition.problem, transition.coupling, risk_aversion
    if transition.book.settings.plan.solver == "conic":
        from scheduler.solve import conic_list  # noqa: PLC0415 - loads cvxpy

        return conic_list.solve(problem, coupling, urgency=urgency, risk_aversion=price)
    found = joint.solve(problem, coupling, urgency=urgency, risk_aversion=price, start=start)
    return polish(problem, coupling, found, urgency=urgency, risk_aversion=price)


def softened(transition: Transition, *, soften: bool) -> tuple[Transition, tuple[str, ...]]:
    """The list with corridors that can hold: moved by the least amounts, and notes that say so.

    Raises:
        InfeasibleError: corridors that no schedule keeps, where they may not be softened.
    """
    coupling = transition.coupling
    below, above = smallest_violation(transition.problem, coupling)
    notes = _violations(transition, below, above)
    if notes and not soften:
        raise InfeasibleError("\n".join((*notes, "widen them, or use --soften")))
    if not notes:
        return transition, ()
    wider = replace(transition, coupling=_softened(coupling, below, above))
    return wider, tuple(f"softened: {note}" for note in notes)


def _softened(coupling: Coupling, below: Array, above: Array) -> Coupling:
    """Bounds moved by what they must give, and a little more so that there is room."""
    gross = coupling.money
    lower, upper = coupling.lower.copy(), coupling.upper.copy()
    lower[coupling.limited] -= np.where(below > 0.0, below + _ROOM * gross, 0.0)
    upper[coupling.limited] += np.where(above > 0.0, above + _ROOM * gross, 0.0)
    return replace(coupling, lower=lower, upper=upper)


def _violations(transition: Transition, below: Array, above: Array) -> tuple[str, ...]:
    """A line for each corridor that must give way, at the time at which it must most."""
    coupling, unit = transition.coupling, transition.unit
    rows, ends = coupling.limited
    gross = coupling.money
    short = np.maximum(below, above)
    lines = []
    for row in np.unique(rows[short > _KEPT * gross]):
        mine = np.flatnonzero(rows == row)
        worst = mine[short[mine].argmax()]
        at = _time(transition.book, transition.clock.end[ends[worst]])
        bounds = coupling.lower[row, ends[worst]] * unit, coupling.upper[row, ends[worst]] * unit
        lines.append(
            f"corridor {transition.measures[row]}: no schedule keeps {_range(*bounds)} at {at}; it "
            f"gives way by {short[worst] * unit:,.0f} there, which is least in all"
        )
    return tuple(lines)


def _range(lower: float, upper: float) -> str:
    low = "-inf" if lower == -np.inf else f"{lower:,.0f}"
    high = "inf" if upper == np.inf else f"{upper:,.0f}"
    return f"[{low}, {high}]"


def _time(book: Book, instant: int | np.int64) -> str:
    zone = book.grids[0].timezone
    return pd.Timestamp(int(instant), tz="UTC").tz_convert(zone).isoformat()
