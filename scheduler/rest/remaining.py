"""Tables of a plan, and newer ones, turned into those of what is left to trade."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InputError
from scheduler.intake.clocks import Clocks
from scheduler.model.ragged import Array
from scheduler.rest.fills import Fills
from scheduler.sessions import resolve
from scheduler.settings import Settings
from scheduler.tables.corridors import limits
from scheduler.tables.draft import Checked
from scheduler.tables.inputs import Inputs
from scheduler.tables.source import cell_text

_WHOLE = 1e-9  # of the quantity: less is nothing left
_LONG_AGO = pd.Timestamp("1980-01-01", tz="UTC")


@dataclass(frozen=True)
class Left:
    """Orders in full, and what of them is left.

    rows : the orders table joined with the market's, full quantities. done, shares : (N,) filled
    and left. over : (N,) whether the window is over with shares left.
    """

    rows: pd.DataFrame
    done: Array
    shares: Array
    over: NDArray[np.bool_]

    @property
    def names(self) -> list[str]:
        return self.rows["order_id"].tolist()

    @property
    def going(self) -> NDArray[np.bool_]:
        """(N,) orders of which something can still be traded."""
        return (self.shares > 0.0) & ~self.over


def joined_rows(inputs: Inputs) -> pd.DataFrame:
    """Orders with their market row, in the order of the orders table."""
    return inputs.orders.frame.merge(
        inputs.market.frame, on="symbol", how="left", suffixes=("", "_market"), validate="m:1"
    )


def left_of(
    inputs: Inputs, fills: Fills, settings: Settings, *, day: date, at: pd.Timestamp
) -> Left:
    """What is left of each order.

    Raises:
        InputError: more filled than an order's quantity; a window that never was one.
    """
    rows = joined_rows(inputs)
    names, quantity = rows["order_id"].tolist(), rows["quantity"].to_numpy(dtype=float)
    done = fills.by_order(names)
    excess = done - quantity
    over = excess > _WHOLE * quantity
    if over.any():
        problems = []
        for order in np.flatnonzero(over).tolist():
            rule = f"is less than the {done[order]:,.10g} shares filled of the order"
            remedy = "correct the fills, raise the quantity, or leave the order out to cancel it"
            mask = np.arange(len(names)) == order
            problems += inputs.orders.problems(mask, "quantity", rule, remedy)
        raise InputError(problems)
    shares = np.where(-excess > _WHOLE * quantity, -excess, 0.0)
    return Left(rows, done, shares, _over(rows, inputs, settings, day, at) & (shares > 0.0))


def _over(
    rows: pd.DataFrame, inputs: Inputs, settings: Settings, day: date, at: pd.Timestamp
) -> NDArray[np.bool_]:
    """Orders with a window of which nothing is left at `at`."""
    now, ever = (
        Clocks(rows, inputs, settings, day, text, _LONG_AGO) for text in (at.isoformat(), None)
    )
    result = np.zeros(len(rows), dtype=np.bool_)
    for order in range(len(rows)):
        try:
            now.grid(order)
        except InputError:
            ever.grid(order)  # one that fails even so is wrong in itself
            result[order] = True
    return result


def rest_inputs(
    inputs: Inputs, left: Left, fills: Fills, *, gross: float, day: date, at: pd.Timestamp
) -> Inputs:
    """The tables of the rest: what is left of each order, and corridors as amounts of now.

    gross : what corridors in percent refer to, base currency.
    """
    keep = left.going
    quantity = left.shares[keep]
    orders = inputs.orders
    frame = orders.frame[keep].reset_index(drop=True)
    frame = frame.assign(quantity=quantity, min_slice=np.minimum(frame["min_slice"], quantity))
    corridors = inputs.corridors
    if corridors is not None:
        calendar = str(left.rows["calendar"].iat[0])
        corridors = _of_now(corridors, _cash(left, fills), gross, day, at, calendar)
    return replace(
        inputs,
        orders=replace(orders, frame=frame, rows=orders.rows[keep]),
        corridors=corridors,
        constraints=_of_orders(inputs.constraints, frame["order_id"].tolist()),
    )


def _of_orders(constraints: Checked | None, names: list[str]) -> Checked | None:
    """Constraints on what still trades: of other orders no more shares will count in them."""
    if constraints is None:
        return None
    keep = constraints.frame["order_id"].isin(names).to_numpy()
    if not keep.any():
        return None
    frame = constraints.frame[keep].reset_index(drop=True)
    return replace(constraints, frame=frame, rows=constraints.rows[keep])


def _cash(left: Left, fills: Fills) -> float:
    """Bought minus sold so far, base currency, at the prices of the fills."""
    fx = left.rows.drop_duplicates("symbol").set_index("symbol")["fx"].fillna(1.0)
    frame = fills.frame
    value = frame["side"] * frame["quantity"] * frame["price"]
    return float((value * frame["symbol"].map(fx).fillna(1.0)).sum())


def _of_now(
    corridors: Checked, cash: float, gross: float, day: date, at: pd.Timestamp, calendar: str
) -> Checked | None:
    """Corridors in amounts, less the cash there is; those that are over are left out."""
    found = limits(corridors.frame, gross)
    moved = np.where(np.array(found.measure) == "cash", cash, 0.0)
    ends = corridors.frame["to"].tolist()
    keep = np.array(
        [end is None or resolve(end, date=day, calendar=calendar) > at for end in ends],
        dtype=np.bool_,
    )
    frame = corridors.frame.assign(
        lower=_texts(found.lower - moved), upper=_texts(found.upper - moved)
    )[keep]
    if frame.empty:
        return None
    return replace(corridors, frame=frame.reset_index(drop=True), rows=corridors.rows[keep])


def _texts(amounts: Array) -> pd.Series[str]:
    texts = [cell_text(float(value)) if np.isfinite(value) else None for value in amounts]
    return pd.Series(texts, dtype=object)


def newer(old: Checked | None, new: Checked | None) -> Checked | None:
    """Rows by symbol: those of the newer table, and of the older one where that has none."""
    if old is None or new is None:
        return new if old is None else old
    kept = ~old.frame["symbol"].isin(new.frame["symbol"]).to_numpy()
    return replace(
        new,
        frame=pd.concat([old.frame[kept], new.frame], ignore_index=True),
        rows=np.concatenate([old.rows[kept], new.rows]),
    )


def dated(readings: Checked | None, since: dict[str, pd.Timestamp]) -> Checked | None:
    """Readings without a time given that of the plan's time zero, by symbol."""
    if readings is None:
        return None
    pairs = zip(readings.frame["symbol"], readings.frame["time"], strict=True)
    times = [
        since[symbol].isoformat() if time is None and symbol in since else time
        for symbol, time in pairs
    ]
    frame = readings.frame.assign(time=pd.Series(times, dtype=object))
    return replace(readings, frame=frame)
