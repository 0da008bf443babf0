"""Checks that need more than one table, for lists that are planned as one and for constraints.

Do exposures, factor_covariance, returns, corridors, constraints and holdings fit the orders and the
market?
After these checks a plan may rely on: exposures and factor_covariance have the same factors;
every order's symbol has exposures, or enough returns; the factors claim no more of a symbol's
variance than can be reconciled; corridors speak of factors and groups that there are, and are not
empty; constraints speak of orders that there are; holdings are whole shares where only whole shares
trade.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import Problem
from scheduler.tables.corridors import limits
from scheduler.tables.draft import Checked, some
from scheduler.tables.exposures import exposure_matrix, factor_names
from scheduler.tables.factor_covariance import covariance_matrix
from scheduler.tables.market import ROUND_THE_CLOCK
from scheduler.tables.returns import returns_problems

MOST_CLAIMED = 1.25
"""Factor volatility over the market table's above which the two are not reconciled (our choice):
sampling error and different histories explain less, a wrong unit explains more."""


def check_list(tables: Mapping[str, Checked], refused: frozenset[str]) -> list[Problem]:
    """Problems of tables that are each without problems of their own.

    `refused` names the tables that were given but could not be read: nothing that would need
    them is checked.
    """
    problems: list[Problem] = []
    orders, market = tables.get("orders"), tables.get("market")
    exposures, covariance = tables.get("exposures"), tables.get("factor_covariance")
    if exposures and covariance:
        problems += factor_problems(exposures, covariance)
    if orders and "constraints" in tables:
        problems += _unknown_orders(tables["constraints"], orders)
    if orders and market:
        traded = market.frame[market.frame["symbol"].isin(orders.frame["symbol"])]
        symbols, vol = traded["symbol"].tolist(), traded["daily_vol"].to_numpy(dtype=np.float64)
        if exposures:
            problems += symbol_problems(exposures, symbols)
        if exposures and covariance and not problems:
            problems += claim_problems(exposures, covariance, symbols, vol)
        if "returns" in tables:
            problems += returns_problems(tables["returns"], symbols)
        if "corridors" in tables:
            problems += _empty_corridors(tables["corridors"], orders, market)
    if "corridors" in tables:
        if "exposures" not in refused:
            problems += _unknown_factors(tables["corridors"], exposures)
        if market:
            problems += _unknown_groups(tables["corridors"], market)
    if "holdings" in tables and market:
        problems += holdings_problems(tables["holdings"], market)
    return problems


def factor_problems(exposures: Checked, covariance: Checked) -> list[Problem]:
    """The factors of one table that the other lacks."""
    columns, rows = factor_names(exposures), covariance.frame["factor"]
    lacking = [name for name in columns if name not in set(rows)]
    rule = f"is no factor of the factor_covariance table {covariance.source}"
    remedy = "add it there, or remove the column"
    problems = [Problem(exposures.source, 1, name, None, rule, remedy) for name in lacking]
    rule = f"has no column in the exposures table {exposures.source}"
    remedy = "add it there, or remove the factor"
    return problems + covariance.problems(~rows.isin(columns).to_numpy(), "factor", rule, remedy)


def symbol_problems(exposures: Checked, symbols: Sequence[str]) -> list[Problem]:
    """The symbols that have no exposures."""
    known = set(exposures.frame["symbol"])
    rule, remedy = "lacks a symbol that is traded", "add a row with its exposures"
    return [
        Problem(exposures.source, None, "symbol", symbol, rule, remedy)
        for symbol in symbols
        if symbol not in known
    ]


def claim_problems(
    exposures: Checked, covariance: Checked, symbols: Sequence[str], vol: NDArray[np.float64]
) -> list[Problem]:
    """The symbols that would move far more by the factors alone than they do in all."""
    factors = factor_names(exposures)
    claimed = np.sqrt(
        factor_variance(
            exposure_matrix(exposures, symbols, factors), covariance_matrix(covariance, factors)
        )
    )
    row_of = dict(zip(exposures.frame["symbol"], exposures.rows.tolist(), strict=True))
    remedy = (
        "is factor_covariance per day, and in the units of the exposures? If so, the market "
        "table's daily_vol is too low"
    )
    return [
        Problem(
            exposures.source,
            row_of[symbols[at]],
            "symbol",
            symbols[at],
            f"factors claim {_percent(claimed[at])} a day, the market table says "
            f"{_percent(vol[at])}",
            remedy,
        )
        for at in np.flatnonzero(claimed > MOST_CLAIMED * vol).tolist()
    ]


def _percent(fraction: float) -> str:
    return f"{100 * fraction:.3g} %"


def factor_variance(
    exposures: NDArray[np.float64], covariance: NDArray[np.float64]
) -> NDArray[np.float64]:
    """The diagonal of B F B', (N,); never below 0."""
    result: NDArray[np.float64] = np.einsum("nk,nk->n", exposures @ covariance, exposures)
    return np.maximum(result, 0.0)


def holdings_problems(holdings: Checked, market: Checked) -> list[Problem]:
    """Fractions of a share of symbols that trade in whole ones."""
    calendars = market.frame.set_index("symbol")["calendar"]
    whole = holdings.frame["symbol"].map(calendars).fillna(ROUND_THE_CLOCK) != ROUND_THE_CLOCK
    part = (whole & (holdings.frame["shares"] % 1 > 0)).to_numpy()
    remedy = f"give whole shares; fractions trade only on calendar {ROUND_THE_CLOCK}"
    return holdings.problems(part, "shares", "is a fraction of a share", remedy)


def _unknown_orders(constraints: Checked, orders: Checked) -> list[Problem]:
    missing = ~constraints.frame["order_id"].isin(orders.frame["order_id"])
    rule = f"is not in the orders table {orders.source}"
    return constraints.problems(missing.to_numpy(), "order_id", rule, "check the spelling")


def _unknown_factors(corridors: Checked, exposures: Checked | None) -> list[Problem]:
    known = [] if exposures is None else factor_names(exposures)
    remedy = f"known: {some(known)}" if known else "factors come with the exposures table"
    return _unknown(corridors, "factor", known, remedy)


def _unknown_groups(corridors: Checked, market: Checked) -> list[Problem]:
    known = market.frame["group"].dropna().unique().tolist()
    remedy = f"known: {some(known)}" if known else "groups come with the market table's group"
    return _unknown(corridors, "group", known, remedy)


def _unknown(corridors: Checked, measure: str, known: list[str], remedy: str) -> list[Problem]:
    kinds = [f"{measure}:{name}" for name in known]
    given = corridors.frame["kind"]
    mask = (given.str.startswith(f"{measure}:") & ~given.isin(kinds)).to_numpy()
    return corridors.problems(mask, "kind", f"names no known {measure}", remedy)


def _empty_corridors(corridors: Checked, orders: Checked, market: Checked) -> list[Problem]:
    """Lower above upper where one is an amount and the other a percentage."""
    rows = orders.frame.merge(market.frame, on="symbol")
    notional = float((rows["quantity"] * rows["price"] * rows["fx"].fillna(1.0)).sum())
    bounds = limits(corridors.frame, notional)
    rule = f"is above upper, 100 % being {notional:,.10g}"
    return corridors.problems(
        bounds.lower > bounds.upper, "lower", rule, "lower it, or raise upper"
    )
