"""What a list looks like as it trades: money, exposures, and where its risk comes from."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd

from scheduler.coupling import Coupling
from scheduler.figures import QUANTILES, Figures
from scheduler.intake import Book
from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Array
from scheduler.problem import Orders
from scheduler.rivals import evenly_timed, volume_proportional
from scheduler.solve.pooled import divided
from scheduler.solve.schedule import Schedule, Status
from scheduler.solve.windows import pools_of
from scheduler.transition import Solved, Transition, measure_weights

PARTS = ("part_of_cost", "part_of_risk")


def balances_frame(transition: Transition, shares: Array) -> pd.DataFrame:
    """One row an interval of the clock, at its end: what is bought, sold and left, base currency.

    Cash is bought less sold so far; gross, net, factors and groups are of what is still to trade.
    Columns that end in lower and upper are the corridors'.
    """
    book, clock = transition.book, transition.clock
    left = transition.left(shares)
    value, done = transition.value, 1.0 - left
    zone = book.grids[0].timezone
    frame = {
        "time": [time.isoformat() for time in pd.to_datetime(clock.end, utc=True).tz_convert(zone)],
        "bought": np.maximum(value, 0.0) @ done,
        "sold": np.maximum(-value, 0.0) @ done,
        "cash": value @ done,
        "gross": np.abs(value) @ left,
        "net": value @ left,
    }
    currencies = book.rows["currency"].fillna(book.currency)
    if currencies.nunique() > 1:
        for code in sorted(currencies.unique()):
            mine = np.where((currencies == code).to_numpy(), value, 0.0)
            frame[f"cash:{code}"] = mine @ done
    if transition.risk is not None:
        for name in transition.risk.factors:
            weights = measure_weights(book, transition.risk, "factor", name)
            frame[f"factor:{name}"] = weights @ left
    for name in sorted(book.rows["group"].dropna().unique()):
        frame[f"group:{name}"] = measure_weights(book, None, "group", name) @ left
    for measure, (lower, upper) in _corridors(transition).items():
        frame[f"{measure}_lower"] = np.where(np.isfinite(lower), lower, np.nan)
        frame[f"{measure}_upper"] = np.where(np.isfinite(upper), upper, np.nan)
    return pd.DataFrame(frame)


def _corridors(transition: Transition) -> dict[str, tuple[Array, Array]]:
    """(T,) bounds of each measure, base currency: the tightest where several corridors meet."""
    coupling, found = transition.coupling, dict[str, tuple[Array, Array]]()
    for row, measure in enumerate(transition.measures):
        lower, upper = (bound[row] * transition.unit for bound in (coupling.lower, coupling.upper))
        low, high = found.get(measure, (lower, upper))
        found[measure] = np.maximum(low, lower), np.minimum(high, upper)
    return found


def list_figures(transition: Transition, figures: Figures, solved: Solved) -> dict[str, Any]:
    """The list's cost, its risk and where that comes from, quantiles, and its certificate."""
    law = list_law(transition, figures)
    factors = _factor_variances(transition, figures.shares)
    brief = list_brief(transition, figures)
    total = brief["cost_std"] ** 2 or 1.0
    specific = _specific_variance(transition, figures)
    return {
        **brief,
        "risk_split": {
            "factors": float(sum(factors.values())) / total,
            "specific": specific / total,
            "own_imbalance": float(law.own.sum()) / total,
            "by_factor": {name: value / total for name, value in factors.items()},
        },
        "quantiles": {f"{p:g}": float(law.quantile(p)[0]) for p in QUANTILES},
        "expected_shortfall_95": float(law.expected_shortfall(0.95)[0]),
        "risk_aversion": solved.certificate.risk_aversion / transition.unit,
        "evenly_timed": list_brief(transition, _retimed(transition, figures, evenly_timed)),
        "volume_proportional": list_brief(
            transition, _retimed(transition, figures, volume_proportional)
        ),
    }


def _retimed(
    transition: Transition, figures: Figures, schedule: Callable[[Book], Array]
) -> Figures:
    return replace(figures, shares=schedule(transition.book))


def list_brief(transition: Transition, figures: Figures) -> dict[str, Any]:
    """Cost, risk, their sum as the list's aim weighs it, and by how much corridors are broken."""
    std = float(list_law(transition, figures).std[0])
    cost, notional = float(figures.expected_cost.sum()), float(figures.notional.sum())
    arrays = transition.book.arrays
    return {
        "expected_cost": cost,
        "expected_cost_bps": 1e4 * cost / notional,
        "cost_std": std,
        "cost_std_bps": 1e4 * std / notional,
        "objective": cost
        + float(arrays.urgency[0]) * std
        + float(arrays.risk_aversion[0]) * std**2,
        "corridor_excess": corridor_excess(transition, figures.shares),
    }


def list_law(transition: Transition, figures: Figures) -> CostDistribution:
    """The distribution of the list's cost: N = 1."""
    base, own = _session_variances(transition, figures)
    rate = float(transition.book.arrays.market.level_rate[0])
    cost = float(figures.expected_cost.sum())
    return CostDistribution(np.array([cost]), base[:, None], own[:, None], np.array([rate]))


def risk_shares(transition: Transition, figures: Figures) -> Array:
    """(N,) each order's part of the list's variance; they add up to 1, or are 0 if nothing is.

    An order's part is its specific and own variance, and x_i (Sigma x)_i of the factors': below
    0 where it hedges the others by more than it adds.
    """
    base, own = figures.stage_variance
    book = transition.book
    specific = np.broadcast_to(transition.orders.specific, figures.notional.shape)
    part = book.layout.sum(base * specific[book.layout.owner] + own)
    if transition.risk is not None:
        loadings = transition.working[:, None] * transition.risk.exposures
        path = transition.coupling.paths(*_state(transition, figures.shares))
        pull = loadings @ (transition.risk.covariance @ (loadings.T @ path))
        part = part + (path * pull).sum(axis=1)
    total = float(part.sum())
    result: Array = part / total if total > 0.0 else np.zeros(len(part))
    return result


def order_parts(transition: Transition, figures: Figures) -> list[dict[str, float | None]]:
    """Each order's part of the list's expected cost (None if that is not above 0) and variance.

    A symbol's part of the variance is its orders' by what each has at risk.
    """
    cost, risk = figures.expected_cost, figures.by_order(risk_shares(transition, figures.pooled))
    if figures.orders.pools is not None:
        of, std = figures.orders.pools.of, figures.cost_std
        risk = risk * std / np.maximum(np.bincount(of, std)[of], 1e-300)
    total = float(cost.sum())
    costs = [value / total if total > 0.0 else None for value in cost.tolist()]
    pairs = zip(costs, risk.tolist(), strict=True)
    return [dict(zip(PARTS, pair, strict=True)) for pair in pairs]


def corridor_excess(transition: Transition, shares: Array) -> dict[str, float]:
    """Most by which each corridor is broken at any interval's end, base currency."""
    coupling = transition.coupling
    level = coupling.rows @ transition.working_left(shares) + coupling.constant[:, None]
    over = np.maximum(np.maximum(coupling.lower - level, level - coupling.upper), 0.0)
    worst = over.max(axis=1, initial=0.0) * transition.unit
    found: dict[str, float] = {}
    for name, value in zip(transition.measures, worst.tolist(), strict=True):
        found[name] = max(value, found.get(name, 0.0))
    return found


def _state(transition: Transition, shares: Array) -> tuple[Array, Array]:
    layout = transition.problem.layout
    fractions = transition.problem.fractions(shares)
    return layout.before(1.0 - layout.cumsum(fractions), np.ones(len(layout.size))), fractions


def _factor_variances(transition: Transition, shares: Array) -> dict[str, float]:
    """Each named factor's part of the variance, e_k (F e)_k summed over time; they add up."""
    if transition.risk is None:
        return {}
    exposure = _named_exposures(transition, shares)
    part = (exposure * (transition.risk.covariance @ exposure)).sum(axis=1)
    return {name: float(v) for name, v in zip(transition.risk.factors, part, strict=True)}


def _named_exposures(transition: Transition, shares: Array) -> Array:
    """(K, 2T) exposures to the named factors, base currency, as in `Coupling.exposures`."""
    assert transition.risk is not None
    named = _with_loadings(transition, transition.working[:, None] * transition.risk.exposures)
    return named.exposures(*_state(transition, shares))


def _with_loadings(transition: Transition, loadings: Array) -> Coupling:
    return replace(transition.coupling, loadings=loadings)


def _specific_variance(transition: Transition, figures: Figures) -> float:
    base, _ = figures.stage_variance
    specific = np.broadcast_to(transition.orders.specific, figures.notional.shape)
    return float((base * specific[transition.book.layout.owner]).sum())


def _session_variances(transition: Transition, figures: Figures) -> tuple[Array, Array]:
    """(D,) variances by session: levels at their mean (factors and specific), own imbalance."""
    book, clock = transition.book, transition.clock
    base, own = figures.stage_variance
    specific = np.broadcast_to(transition.orders.specific, figures.notional.shape)
    session = book.arrays.stages.session
    count = int(max(session.max(), clock.session.max())) + 1
    mean_level = np.bincount(session, base * specific[book.layout.owner], minlength=count)
    if transition.risk is not None:
        exposure = _named_exposures(transition, figures.shares)
        moment = (exposure * (transition.risk.covariance @ exposure)).sum(axis=0)
        half = len(clock.end)
        both = moment[:half] + moment[half:]
        mean_level = mean_level + np.bincount(clock.session, both, minlength=count)
    by_own: Array = np.bincount(session, own, minlength=count).astype(float)
    return np.asarray(mean_level, dtype=float), by_own


def as_schedule(transition: Transition, orders: Orders, solved: Solved, seconds: float) -> Schedule:
    """The list's schedule with its certificate on every order: they were found together."""
    count = len(transition.book.names)
    status, certificate = list_status(solved), solved.certificate
    std = np.sqrt(certificate.risk)
    together = Schedule(
        solved.shares,
        np.full(count, certificate.risk_aversion / transition.unit if std > 0.0 else 0.0),
        [status] * count,
        np.full(count, list_gap(solved)),
        np.full(count, certificate.kkt_residual),
        np.ones(count, dtype=np.bool_),
        np.full(count, solved.iterations, dtype=np.int64),
        np.full(count, seconds),
    )
    return divided(orders, pools_of(orders), together)


def list_status(solved: Solved) -> Status:
    """Proven where every name is convex on its own: corridors and factors always are."""
    if solved.certificate.convex.all():
        return Status.PROVEN
    bounded = solved.bound is not None and np.isfinite(solved.bound)
    return Status.BOUNDED if bounded else Status.LOCAL


def list_gap(solved: Solved) -> float:
    """The duality gap; where there is a bound in its place, the distance to that."""
    bounded = list_status(solved) is Status.BOUNDED
    return solved.bound if bounded and solved.bound is not None else solved.certificate.gap


def list_certificate(
    transition: Transition, solved: Solved, figures: Figures, seconds: float
) -> dict[str, Any]:
    """The list's certificate, with the loss by rounding to whole lots."""
    status, certificate = list_status(solved), solved.certificate
    arrays = transition.book.arrays
    ideal = certificate.objective * transition.unit
    urgency, risk_aversion = float(arrays.urgency[0]), float(arrays.risk_aversion[0])
    base, own = _session_variances(transition, figures)
    variance = float(base.sum() + own.sum())
    cost = float((figures.impact + figures.spread + figures.fees).sum())
    value = cost + urgency * np.sqrt(variance) + risk_aversion * variance
    return {
        "status": status.name.lower(),
        "meaning": status.value,
        "gap": list_gap(solved),
        "kkt_residual": certificate.kkt_residual,
        "iterations": solved.iterations,
        "gradient_steps": solved.gradient_steps,
        "seconds": seconds,
        "rounding_loss": (value - ideal) / abs(ideal) if ideal else 0.0,
        "names_not_convex": int(np.count_nonzero(np.logical_not(certificate.convex))),
    }
