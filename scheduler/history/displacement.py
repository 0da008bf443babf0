"""What tapes say of the model's claims, one relaxation volume L at a time.

A tape is cut after every L shares. Where it is cut stand a reading iota, the price's log return
over the last L, and that over the next L; moves of the price over closed periods are left out of
both. D(iota L) is the displacement that the model sees in a reading (`scheduler.model.impact`),
and every return is divided by its symbol's D(L), so that x = sgn(iota) |iota|^delta stands for D
and symbols can be taken together.

- displacement: the last return on x; 1 where the model holds. Partly mechanical: the tick rule
  takes its signs from the price. A further regressor, iota itself, says whether the power delta
  is enough.
- variance: the sum of squares of the next return's quarters, over sigma_0^2 r times the open
  part of a day's variance, on |iota|. The *next* one: in the same interval the link is mechanical.
  The regression takes out every session's own mean (its energy level), the last interval's
  variance, and the time of day. A reading that fades with nothing new coming gives
  int_0^1 e^{-u} du = 0.63.
- reading weight: the next return on -x has the slope b, the part of the displacement given back. A
  plan with weight w expects D(w iota L) = w^delta D(iota L) at time zero to fall to
  D(w iota L / e) after L more shares, a part w^delta (1 - e^-delta) of D(iota L). So

      s = b / (1 - e^-delta)   is the part of the displacement that fades at the model's rate,
      w = s^(1/delta),         s cut to [0, 1].

  Where flow persists, s is below 0 and a reading should not be believed at all.

All intervals are 95 %, by `scheduler.history.regression`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from scheduler.history.regression import Slope, least_squares
from scheduler.history.tape import Imbalance, Tape
from scheduler.model.impact import displacement
from scheduler.model.ragged import Array, Index
from scheduler.model.stages import Market

FEWEST = 50
"""Intervals below which nothing is estimated: the errors would be guesses (our choice)."""
FADED = 1.0 - float(np.exp(-1.0))
"""int_0^1 e^{-u} du."""

_PARTS = 4  # of an interval, for its variance


@dataclass(frozen=True, eq=False)
class Intervals:
    """Intervals of one L each, (n,); of one symbol or of many together.

    reading : iota at the beginning. shape : x. last, following : returns over D(L). variance,
    variance_before : of this and of the last interval, over the model's ground variance.
    day : which symbol and session. time_of_day : from 0 to 1. moment : number in time order.
    """

    reading: Array
    shape: Array
    last: Array
    following: Array
    variance: Array
    variance_before: Array
    day: Index
    time_of_day: Array
    moment: Index

    def __len__(self) -> int:
        return len(self.reading)


@dataclass(frozen=True)
class Findings:
    """See the module. `share` is s, `weight` is w, each with its interval."""

    displacement: Slope
    curvature: Slope
    variance: Slope
    given_back: Slope
    share: float
    share_interval: tuple[float, float]
    weight: float
    weight_interval: tuple[float, float]

    def as_dict(self) -> dict[str, Any]:
        return {
            "intervals": self.given_back.observations,
            "displacement_on_root": self.displacement.as_dict(),
            "displacement_on_reading_besides": self.curvature.as_dict(),
            "variance_on_size": {**self.variance.as_dict(), "model": FADED},
            "given_back": self.given_back.as_dict(),
            "fading_share": {"value": self.share, "interval": list(self.share_interval)},
        }


def intervals_of(tape: Tape, along: Imbalance, market: Market, open_share: float) -> Intervals:
    """The intervals of a tape, each with one before it.

    market : one entry, the symbol's. open_share : part of a day's variance while there is trading.
    """
    unit = float(displacement(market, market.relaxation_volume)[0])
    ground = float((market.ground_vol**2 * market.relaxation)[0]) * open_share
    cut = _cuts(tape, along.clock)  # (n, 2 parts + 1) trades, from the last interval to the next
    moves = np.diff(np.log(tape.value), prepend=np.log(tape.value[0]))
    moves[tape.sessions.first] = 0.0
    level = np.cumsum(moves)[cut] / unit
    square = np.diff(level, axis=1) ** 2 * (unit**2 / ground)
    at = cut[:, _PARTS]
    session = tape.session[at]
    opens, closes = tape.known.opens[session], tape.known.closes[session]
    width = market.relaxation[0] * np.median(closes - opens) if len(at) else 1.0
    reading = along.reading[at]
    return Intervals(
        reading=reading,
        shape=displacement(market, reading * market.relaxation_volume) / unit,
        last=level[:, _PARTS] - level[:, 0],
        following=level[:, -1] - level[:, _PARTS],
        variance=square[:, _PARTS:].sum(axis=1),
        variance_before=square[:, :_PARTS].sum(axis=1),
        day=session,
        time_of_day=(tape.instant[at] - opens) / (closes - opens),
        moment=(tape.instant[at] // width).astype(np.int64),
    )


def _cuts(tape: Tape, clock: Array) -> Index:
    """The trades at which each interval, and the one before it, are cut into parts."""
    rows = [np.empty((0, 2 * _PARTS + 1), np.int64)]
    stretches = tape.stretches
    for first, last in zip(stretches.first.tolist(), stretches.last.tolist(), strict=True):
        count = int(clock[last] * _PARTS) + 1
        marks = np.arange(count) / _PARTS
        at = np.searchsorted(clock[first : last + 1], marks, side="right") - 1
        at = first + np.maximum(at, 0)
        starts = np.arange(_PARTS, count - _PARTS, _PARTS)
        rows.append(at[starts[:, None] + np.arange(-_PARTS, _PARTS + 1)])
    return np.concatenate(rows)


def together(parts: Sequence[Intervals]) -> Intervals:
    """The intervals of several symbols as one set."""
    columns = zip(*(vars(part).values() for part in parts), strict=True)
    joined = Intervals(*(np.concatenate(column) for column in columns))
    owner = np.repeat(np.arange(len(parts)), [len(part) for part in parts])
    day = np.unique(np.column_stack((owner, joined.day)), axis=0, return_inverse=True)[1]
    return replace(joined, day=day.reshape(-1))


def findings(intervals: Intervals, exponent: float) -> Findings | None:
    """Estimates and tests; None of fewer than `FEWEST` intervals, or of readings or prices that
    do not move: least squares would call nothing exact.
    """
    if len(intervals) < FEWEST or _still(intervals):
        return None
    x, iota, moment = intervals.shape, intervals.reading, intervals.moment
    one = np.ones_like(x)
    root, _ = least_squares(intervals.last, [x, one], moment)
    _, besides, _ = least_squares(intervals.last, [x, iota, one], moment)
    back, _ = least_squares(intervals.following, [-x, one], moment)
    faded = 1.0 - float(np.exp(-exponent))
    low, high = (edge / faded for edge in back.interval)
    share = back.value / faded
    return Findings(
        displacement=root,
        curvature=besides,
        variance=_variance_link(intervals),
        given_back=back,
        share=share,
        share_interval=(low, high),
        weight=_weight(share, exponent),
        weight_interval=(_weight(low, exponent), _weight(high, exponent)),
    )


def _still(intervals: Intervals) -> bool:
    size = _within(np.abs(intervals.reading), intervals.day)
    return not (np.ptp(intervals.reading) and size.any() and np.ptp(intervals.last))


def _weight(share: float, exponent: float) -> float:
    return float(min(max(share, 0.0), 1.0) ** (1.0 / exponent))


def _variance_link(intervals: Intervals) -> Slope:
    """Slope of the next variance on |iota|, within sessions."""
    hour = intervals.time_of_day
    columns = [np.abs(intervals.reading), intervals.variance_before, hour, hour**2]
    y, *x = (_within(values, intervals.day) for values in (intervals.variance, *columns))
    return least_squares(y, x, intervals.moment, lost=len(np.unique(intervals.day)))[0]


def _within(values: Array, day: Index) -> Array:
    """Values less their mean in the same session."""
    place = np.unique(day, return_inverse=True)[1]
    mean = np.bincount(place, values) / np.bincount(place)
    result: Array = values - mean[place]
    return result
