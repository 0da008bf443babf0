"""Jumps of the close that are no news: splits and bad prices, found and named, never guessed away.

A split: the open stands near 1/2, 1/3, ..., 2/3 of the close before (or 2, 3, ..., 3/2 times it),
and nothing that happened within the session explains the distance. A bad price: a jump of more
than `WILD` robust deviations that the next session takes back. A jump that is neither counts as
what it seems to be, a move of the market.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scheduler.history.days import Days

NEAR = 0.03
"""How far, in logs, the open may be from a split's ratio: a usual night's move (our choice)."""
CALM = 0.5
"""Most that the session's own range may be, as a part of the jump (our choice)."""
WILD = 10.0
"""Robust deviations beyond which a return is looked at (our choice)."""
TAKEN_BACK = 0.2
"""Most that may be left of a bad price's jump after the next session (our choice)."""


@dataclass(frozen=True, eq=False)
class Jumps:
    """By session, (D,).

    split : new shares for one old; 1: no split. bad : the close is a bad price. wild : a
    large return that counts. usable : the return counts: its session follows the one before,
    and neither split nor bad price is in it.
    """

    split: NDArray[np.float64]
    bad: NDArray[np.bool_]
    wild: NDArray[np.bool_]
    usable: NDArray[np.bool_]

    @property
    def new_shares(self) -> NDArray[np.float64]:
        """Today's shares for one share of each session."""
        after = np.append(self.split[1:], 1.0)
        result: NDArray[np.float64] = np.cumprod(after[::-1])[::-1]
        return result


def find_jumps(days: Days) -> Jumps:
    """Splits, bad prices and large moves of one symbol's sessions."""
    bad = _bad(days)
    touched = bad | np.append(False, bad[:-1])
    split = np.where(touched, 1.0, _split(days))
    usable = days.follows & ~touched & (split == 1.0)
    wild = usable & (np.abs(np.nan_to_num(days.returns)) > _limit(days))
    return Jumps(split, bad, wild, usable)


def _bad(days: Days) -> NDArray[np.bool_]:
    """Where the close jumps and the next session takes it back."""
    returns = np.where(days.follows, days.returns, 0.0)
    large = np.abs(returns) > _limit(days)
    left = np.abs(returns[:-1] + returns[1:])
    bad = np.zeros(len(returns), np.bool_)
    bad[:-1] = large[:-1] & large[1:] & (left <= TAKEN_BACK * np.abs(returns[:-1]))
    return bad


def _split(days: Days) -> NDArray[np.float64]:
    """New shares for one old, by where the open stands to the close before."""
    gap = np.nan_to_num(days.gaps)
    size = np.exp(np.abs(gap))
    ratio = np.where(size < 1.75, 1.5, np.round(size))
    calm = np.log(days.high / days.low) < CALM * np.abs(gap)
    found = calm & (np.abs(np.log(size / ratio)) <= NEAR)
    return np.where(found, ratio ** -np.sign(gap), 1.0)


def _limit(days: Days) -> float:
    """The size beyond which a return is looked at; none where most prices do not move at all."""
    returns = np.abs(days.returns[days.follows])
    scale = float(np.median(returns)) / 0.6745 if len(returns) else 0.0
    return WILD * scale if scale > 0.0 else np.inf
