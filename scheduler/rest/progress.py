"""How far orders are, against their plan, and how far chance takes them from it.

The band is of an order whose slices keep their planned share of the volume as it comes. With log
volume normal, s from session to session, b from bucket to bucket, and E e = 1, what is done of the
slices q_t that are due has mean P = sum q_t and variance

    sum_d S_d^2 (e^{s^2} - 1) + sum_t q_t^2 e^{s^2} (e^{b^2} - 1),   S_d the sum over session d;

its law is taken as the log-normal one of these two moments (L. Fenton, IRE Trans. Commun. Syst.
8(1), 57-67, 1960), cut at the whole order.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd

from scheduler.intake import Book
from scheduler.model.ragged import Array, Ragged
from scheduler.paths import BUCKET_NOISE, SESSION_NOISE
from scheduler.sessions import Grid

_NORMAL_975 = 1.959963984540054
AHEAD, BEHIND, ON_PLAN = "ahead", "behind", "on plan"


def over_by(grids: Iterable[Grid], at: pd.Timestamp) -> Array:
    """(M,) how much of each stage is over at an instant; an auction at that instant is to come."""
    instant = at.tz_convert("UTC").tz_localize(None).to_datetime64().astype("datetime64[ns]")
    parts = []
    for grid in grids:
        begin = grid.start.astype(np.int64)
        length = np.maximum(grid.end.astype(np.int64) - begin, 1)
        parts.append(np.clip((instant.astype(np.int64) - begin) / length, 0.0, 1.0))
    return np.concatenate(parts)


def done_between(book: Book, shares: Array, start: pd.Timestamp, end: pd.Timestamp) -> Array:
    """(N,) shares of a schedule that trade between two instants, evenly within a bucket."""
    passed = over_by(book.grids, end) - over_by(book.grids, start)
    result: Array = book.layout.sum(shares * passed)
    return result


def band(
    layout: Ragged,
    session: np.ndarray[tuple[int], np.dtype[np.int64]],
    due: Array,
    quantity: Array,
    *,
    session_noise: float = SESSION_NOISE,
    bucket_noise: float = BUCKET_NOISE,
) -> tuple[Array, Array]:
    """(N,) what chance leaves 95 % of orders between, of slices due (M,)."""
    mean = layout.sum(due)
    by_session = np.zeros((len(quantity), int(session.max()) + 1))
    np.add.at(by_session, (layout.owner, session), due)
    variance = (by_session**2).sum(axis=1) * np.expm1(session_noise**2)
    variance += layout.sum(due**2) * np.exp(session_noise**2) * np.expm1(bucket_noise**2)
    some = np.where(mean > 0.0, mean, 1.0)
    spread = np.log1p(variance / some**2)
    low, high = (
        np.minimum(mean * np.exp(sign * _NORMAL_975 * np.sqrt(spread) - 0.5 * spread), quantity)
        for sign in (-1.0, 1.0)
    )
    return low, high


def verdict(done: float, low: float, high: float) -> str:
    """Whether an order is ahead of its plan or behind it by more than chance explains."""
    tolerance = 1e-9 * max(high, 1.0)
    if done < low - tolerance:
        return BEHIND
    return AHEAD if done > high + tolerance else ON_PLAN
