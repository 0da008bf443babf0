"""The returns table: daily returns of the past, from which a covariance is estimated.

Canonical frame, in the order of the dates: `date` (text, as 2026-01-05), then one column per
symbol: the fraction by which its price changed on that day. NaN only before a symbol's history
begins: a hole later on is refused, because filling it in would invent co-movement.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from scheduler.errors import Problem
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Checked, Draft, Table, gates, some
from scheduler.tables.times import day

FEWEST = 60
"""Days below which no covariance is estimated: a quarter, where the standard error of a
correlation near 0 is 0.13 (our choice)."""

_UNITS = "write fractions: a rise of 1 % is 0.01"

TABLE = Table(
    "returns",
    (Words("date", "ISO 8601 date, once per date", required=True, parse=day),),
    unique=("date",),
    rest=Number(
        "(each symbol)",
        "return of the day, fraction of the price the day before",
        empty="not yet listed; only before the symbol's first return",
        low=-1,
        high=10,
        remedy=_UNITS,
    ),
)


def returns_problems(returns: Checked, symbols: Sequence[str]) -> list[Problem]:
    """What keeps the covariance of these symbols from being estimated."""
    source, known = returns.source, set(returns.frame.columns[1:])
    absent = [symbol for symbol in symbols if symbol not in known]
    remedy = "add a column with its returns; none of the list may be left out"
    lacking = [Problem(source, 1, name, None, "has no column", remedy) for name in absent]
    days = returns.frame.drop(columns="date").notna().sum()
    remedy = f"give at least {FEWEST}, or those of a like symbol"
    short = [
        Problem(source, None, name, None, f"has only {days[name]} returns", remedy)
        for name in symbols
        if name in known and days[name] < FEWEST
    ]
    return lacking + short or _still(returns, symbols)


def _still(returns: Checked, symbols: Sequence[str]) -> list[Problem]:
    """Symbols whose returns vary, but not on the days that all symbols have in common."""
    sample, dates, _ = common_history(returns, symbols)
    rule = f"has no returns that vary from {dates[0]} on, where all symbols have returns"
    remedy = "check its history"
    return [
        Problem(returns.source, None, symbols[at], None, rule, remedy)
        for at in np.flatnonzero(np.ptp(sample, axis=0) == 0).tolist()
    ]


def common_history(
    returns: Checked, symbols: Sequence[str]
) -> tuple[NDArray[np.float64], list[str], tuple[str, ...]]:
    """Returns (T, N) and dates of the days on which all symbols have returns, and notes."""
    table = returns.frame[list(symbols)].to_numpy(dtype=np.float64)
    begins = np.isnan(table).sum(axis=0)
    first = int(begins.max())
    notes = []
    if first:
        late = [symbol for symbol, begin in zip(symbols, begins, strict=True) if begin == first]
        text = f"the first {first} of {len(table)} days left out, before those of {some(late)}"
        notes.append(f"{returns.source}: {text}")
    return table[first:], returns.frame["date"].tolist()[first:], tuple(notes)


def _check_length(draft: Draft) -> None:
    if 0 < len(draft.frame) < FEWEST:
        rule = f"has {len(draft.frame)} days, fewer than {FEWEST}"
        remedy = "give a longer history"
        draft.problems.append(Problem(draft.raw.source, None, None, None, rule, remedy))


def _check_holes(draft: Draft) -> None:
    """Empty cells are one block, before the symbol's first return in the order of dates."""
    if draft.frame["date"].isna().any():
        return
    order = np.argsort(draft.frame["date"].to_numpy(dtype=str), kind="stable")
    names = list(draft.frame.columns[1:])
    known = draft.frame[names].notna().to_numpy(dtype=np.bool_)[order]
    holes = ~known & np.maximum.accumulate(known, axis=0)
    for row, at in np.argwhere(holes).tolist():
        if not str(draft.raw.cells[names[at]].iat[order[row]]).strip():
            draft.flag_row(
                int(order[row]),
                names[at],
                "is empty after the symbol's first return",
                "fill it in (0 where the price stood still), or leave the date out for all",
            )


def _check_moves(draft: Draft) -> None:
    """Every symbol's returns vary, and by no more than a believable volatility."""
    most = draft.settings.checks.max_daily_vol
    flawed = {problem.column for problem in draft.problems}
    names = [name for name in draft.frame.columns[1:] if name not in flawed]
    for name, column in zip(names, draft.frame[names].to_numpy(dtype=np.float64).T, strict=True):
        moves = column[~np.isnan(column)]
        if not len(moves) or np.ptp(moves) == 0:
            rule, remedy = "has no returns that vary", "check its history, or remove the column"
        elif (size := float(np.sqrt(np.mean(moves**2)))) > most:
            rule, remedy = f"moves by {size:.3g} a day, above {most:g}", f"percent? {_UNITS}"
        else:
            continue
        draft.problems.append(Problem(draft.raw.source, None, name, None, rule, remedy))


def _sort(draft: Draft) -> None:
    dates = draft.frame["date"]
    if draft.problems or dates.is_monotonic_increasing:
        return
    order = np.argsort(dates.to_numpy(dtype=str))
    draft.frame = draft.frame.iloc[order].reset_index(drop=True)
    draft.rows = draft.rows[order]
    draft.note("rows put in the order of their dates")


ensure, read_returns = gates(TABLE, _check_length, _check_holes, _check_moves, _sort)
