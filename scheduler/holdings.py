"""From the portfolio there is to the one there is to be: the orders of a transition."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InputError, Problem
from scheduler.model.ragged import Array
from scheduler.tables.cross_list import holdings_problems
from scheduler.tables.draft import Checked, some

_ROUNDING = 1e-9
"""Part of a lot by which a trade may miss whole lots and still count as whole."""


def orders_from_holdings(
    legacy: Checked, target: Checked, market: Checked
) -> tuple[pd.DataFrame, tuple[str, ...]]:
    """One order for each symbol whose shares change, and notes.

    What both portfolios hold is not traded. A symbol that one of them lacks is held with 0 shares
    there. Each trade is rounded towards zero to whole lots of the market table.

    Returns:
        An orders table (`order_id`, `symbol`, `side`, `quantity`) in the order of the legacy
        holdings, then of the target's; and notes: lots not traded, short sales, cash by currency.

    Raises:
        InputError: symbols that the market table lacks, fractions of a share, nothing to trade.
    """
    frame = _changes(legacy.frame, target.frame)
    _check(frame["symbol"], legacy, target, market)
    frame = frame.merge(market.frame, on="symbol", how="left")
    frame["traded"], frame["whole"] = _whole_lots(
        frame["change"].to_numpy(dtype=float), frame["lot_size"].to_numpy(dtype=float)
    )
    done = frame[frame["traded"] != 0].reset_index(drop=True)
    if done.empty:
        rule = "differs from the legacy holdings by less than a lot of each symbol"
        raise InputError([Problem(target.source, None, None, None, rule, "nothing is to be done")])
    side = ["buy" if traded > 0 else "sell" for traded in done["traded"]]
    orders = pd.DataFrame(
        {
            "order_id": [f"{word}-{name}" for word, name in zip(side, done["symbol"], strict=True)],
            "symbol": done["symbol"],
            "side": side,
            "quantity": done["traded"].abs(),
        }
    )
    return orders, (*_note_lots(frame), *_note_short_sales(done), *_note_cash(done))


def _changes(legacy: pd.DataFrame, target: pd.DataFrame) -> pd.DataFrame:
    """`symbol`, `held` and `change` in shares, where there is a change."""
    symbols = pd.concat([legacy["symbol"], target["symbol"]]).drop_duplicates(ignore_index=True)
    held, wanted = (
        symbols.map(table.set_index("symbol")["shares"]).fillna(0.0) for table in (legacy, target)
    )
    frame = pd.DataFrame({"symbol": symbols, "held": held, "change": wanted - held})
    return frame[frame["change"] != 0]


def _check(symbols: pd.Series[str], legacy: Checked, target: Checked, market: Checked) -> None:
    """There is something to trade, in symbols of the market table and in whole shares."""
    problems = [*holdings_problems(legacy, market), *holdings_problems(target, market)]
    lacking = symbols[~symbols.isin(market.frame["symbol"])]
    rule = f"is not in the market table {market.source}"
    for table in (legacy, target):
        missing = table.frame["symbol"].isin(lacking)
        lacking = lacking[~lacking.isin(table.frame["symbol"])]  # each is named once
        problems += table.problems(missing.to_numpy(), "symbol", rule, "add a row for it there")
    if not problems and symbols.empty:
        rule, remedy = "holds what the legacy holdings do", "nothing is to be done"
        problems = [Problem(target.source, None, None, None, rule, remedy)]
    if problems:
        raise InputError(problems)


def _whole_lots(change: Array, lot: Array) -> tuple[Array, NDArray[np.bool_]]:
    """The change rounded towards zero to whole lots, and whether it was whole lots before.

    0.3 is three lots of 0.1, though the quotient of the two floats is below 3.
    """
    lots = np.abs(change) / lot
    nearest = np.round(lots)
    whole = np.abs(lots - nearest) <= _ROUNDING + 1e-15 * lots
    return np.sign(change) * np.round(np.where(whole, nearest, np.floor(lots)) * lot, 9), whole


def _note_lots(frame: pd.DataFrame) -> list[str]:
    names = frame.loc[~frame["whole"], "symbol"].tolist()
    return [f"less than a lot is left untraded for {some(names)}"] if names else []


def _note_short_sales(done: pd.DataFrame) -> list[str]:
    """A sale beyond what is held is a short sale, in whole or in part."""
    after = done["held"] + done["traded"]
    names = done.loc[(done["traded"] < 0) & (after < 0), "symbol"].tolist()
    if not names:
        return []
    return [
        "sold short, in whole or in part: locate, marking and uptick rules may ask for an order "
        f"of its own for the short part of {some(names)}"
    ]


def _note_cash(done: pd.DataFrame) -> list[str]:
    """Bought minus sold of each currency, at the market table's prices."""
    notes = []
    money = done["traded"] * done["price"]
    for currency, amounts in money.groupby(done["currency"].fillna(""), sort=True):
        bought, sold = amounts[amounts > 0].sum(), -amounts[amounts < 0].sum()
        net, word = bought - sold, "needed" if bought > sold else "set free"
        text = f"{abs(net):,.2f} {word} before costs: {bought:,.2f} bought, {sold:,.2f} sold"
        notes.append(f"cash {currency or 'in base currency'}: {text}")
    return notes
