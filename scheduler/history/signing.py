"""Which side began a trade: quote rule, then tick rule (Lee & Ready 1991, J. Finance 46, 733-746).

A trade above the midpoint of the quote in force was begun by the buyer, below it by the seller. At
the midpoint, or where no quote is known, the tick rule decides: the sign of the last change of
price in the same session. What has no sign after both is left unsigned: trades before a session's
first change of price, and those of an auction, which nobody begins.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scheduler.model.ragged import Array, Ragged

Signs = NDArray[np.int8]

_ROUNDING = 1e-12  # of a price, within which it is at the midpoint


@dataclass(frozen=True, eq=False)
class Signed:
    """sign : (n,) +1 bought, -1 sold, 0 unsigned. by_quote : (n,) whether the quote decided."""

    sign: Signs
    by_quote: NDArray[np.bool_]

    def shares(self, quantity: Array) -> dict[str, float]:
        """Shares of the volume signed by quote, by tick, and left unsigned."""
        total = float(quantity.sum())
        quoted = float(quantity[self.by_quote].sum()) / total
        unsigned = float(quantity[self.sign == 0].sum()) / total
        return {"by_quote": quoted, "by_tick": 1.0 - quoted - unsigned, "unsigned": unsigned}


def sign_trades(
    price: Array, middle: Array, sessions: Ragged, auction: NDArray[np.bool_]
) -> Signed:
    """Sign the trades of one symbol, in time order.

    price : (n,). middle : (n,) midpoint of the quote in force before the trade, NaN where none is
    known. sessions : the layout of the trades by session. auction : (n,) trades of an auction.
    """
    off = price - middle
    at_middle = np.isnan(middle) | (np.abs(off) <= _ROUNDING * price)
    side = np.where(at_middle, 0.0, np.sign(off))
    by_quote = (side != 0.0) & ~auction
    sign = np.where(by_quote, side, ticks(price, sessions)).astype(np.int8)
    return Signed(np.where(auction, np.int8(0), sign), by_quote)


def ticks(price: Array, sessions: Ragged) -> Signs:
    """The tick rule: the sign of the last change of price; 0 before a session's first, (n,)."""
    change = np.sign(np.diff(price, prepend=price[:1]))
    change[sessions.first] = 0.0
    counts = change != 0.0
    counts[sessions.first] = True
    latest = np.maximum.accumulate(np.where(counts, np.arange(len(price)), 0))
    signs: Signs = change[latest].astype(np.int8)
    return signs
