"""What ties the names of a list together: factor risk and corridors, on one clock grid.

The clock grid is the union of all names' stage edges: T intervals. In interval c name i is in one
free bucket t, or stands at its end, and holds x_i = x_{t-1} - u y_t with u running linearly from
`begin` to `end`. Factors are made orthonormal by taking a Cholesky factor of their covariance into
the loadings, so with w_ic the square root of the interval's variance share,

    f_kc(u) = sum_i L_ik w_ic x_i(u),   Var_factors = sum_kc int f_kc^2 du = sum_kc m_kc^2 + d_kc^2,

m the value at the middle and d = (f(1) - f(0)) / sqrt 12: exact, because f is linear. A corridor is
a weighted sum of the x_i, plus a constant, between bounds at the ends of intervals. A span asks
for a least part of one name from one bucket to another: sum of y_t = x_{first-1} - x_last.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from scheduler.model.ragged import Array, Index

BEFORE, AFTER = -1, -2  # in place of a bucket: nothing traded yet (x = 1), all of it done (x = 0)
_ROOT12 = float(np.sqrt(12.0))


@dataclass(frozen=True)
class Spans:
    """S spans: positions of the first and last free bucket, both of one name; the least part."""

    first: Index
    last: Index
    least: Array

    def parts(self, x: Array, y: Array) -> Array:
        """(S,) what is traded within each span, of 1."""
        result: Array = x[self.first] - x[self.last] + y[self.last]
        return result

    def pull(self, price: Array, by_x: Array, by_y: Array) -> None:
        """Add the transpose of `parts` to slopes by x_{t-1} and by y_t, (M,) each."""
        np.add.at(by_x, self.first, price)
        np.add.at(by_x, self.last, -price)
        np.add.at(by_y, self.last, price)


_NONE = np.zeros(0, dtype=np.int64)
NO_SPANS = Spans(_NONE, _NONE, np.zeros(0))


@dataclass(frozen=True)
class Coupling:
    """N names, K factors, R corridors, T intervals of the clock.

    bucket : (N, T) position in the flat arrays of free buckets, or BEFORE or AFTER.
    begin, end : (N, T) part of that bucket done at both ends of the interval.
    weight : (N, T) square root of the variance share. loadings : (N, K) money a unit of x.
    rows : (R, N) money a unit of x. constant : (R,). lower, upper : (R, T), at the interval's end;
    infinite where there is no bound. spans : bounds within single names. residual : (N,) part that
    never trades: left to the end in every level, at risk to the end of its name's window.
    """

    bucket: Index
    begin: Array
    end: Array
    weight: Array
    loadings: Array
    rows: Array
    constant: Array
    lower: Array
    upper: Array
    spans: Spans = NO_SPANS
    residual: Array | float = 0.0

    @cached_property
    def inside(self) -> Array:
        """(N, T) 1 where the interval has a bucket."""
        return np.where(self.bucket >= 0, 1.0, 0.0)

    @cached_property
    def at(self) -> Index:
        """(N, T) bucket, 0 where there is none."""
        return np.maximum(self.bucket, 0)

    @cached_property
    def middle(self) -> Array:
        """(N, T) part of the bucket done at the interval's middle."""
        result: Array = 0.5 * (self.begin + self.end)
        return result

    @cached_property
    def span(self) -> Array:
        """(N, T) part of the bucket done within the interval, over sqrt 12."""
        result: Array = (self.end - self.begin) / _ROOT12
        return result

    @cached_property
    def untouched(self) -> Array:
        """(N, T) x that no slice moves: of names that have not begun, and residuals."""
        held = np.broadcast_to(np.reshape(self.residual, (-1, 1)), self.bucket.shape)
        result: Array = np.where(self.bucket == BEFORE, 1.0, 0.0) + held
        return result

    @cached_property
    def at_risk(self) -> Array:
        """(N, T) the same while a name's window lasts."""
        return np.where(self.bucket == AFTER, 0.0, self.untouched)

    @cached_property
    def limited(self) -> tuple[Index, Index]:
        """Corridor and interval of every bound of a corridor, (n,) each."""
        rows, ends = np.nonzero(np.isfinite(self.lower) | np.isfinite(self.upper))
        return rows.astype(np.int64), ends.astype(np.int64)

    @cached_property
    def money(self) -> float:
        """The largest gross value of a corridor; 1 if there is none: levels are compared to it."""
        return float(np.abs(self.rows).sum(axis=1).max(initial=0.0)) or 1.0

    @cached_property
    def bounds(self) -> tuple[Array, Array]:
        """Lower and upper bounds of the limited levels, (n + S,) each."""
        lower, upper = self.lower[self.limited], self.upper[self.limited]
        least = self.money * self.spans.least
        return np.concatenate((lower, least)), np.concatenate((upper, np.full(len(least), np.inf)))

    def exposures(self, x: Array, y: Array, *, direction: bool = False) -> Array:
        """(K, 2T): exposures at the middles, then their changes over sqrt 12.

        With `direction`, of a change of the state: names that have not begun do not move.
        """
        result: Array = self.loadings.T @ self.paths(x, y, direction=direction)
        return result

    def paths(self, x: Array, y: Array, *, direction: bool = False) -> Array:
        """(N, 2T): what a unit of loading adds to the exposures."""
        slices = y[self.at] * self.inside
        middle = x[self.at] * self.inside - self.middle * slices
        if not direction:
            middle = middle + self.at_risk
        return np.concatenate((self.weight * middle, -self.weight * self.span * slices), axis=1)

    def pull_exposures(self, price: Array, buckets: int) -> tuple[Array, Array]:
        """Transpose of `exposures` in a direction: slopes by x_{t-1} and by y_t, (M,) each."""
        both = self.loadings @ price
        half = self.weight.shape[1]
        middle = self.weight * both[:, :half] * self.inside
        change = self.weight * self.span * both[:, half:] * self.inside
        return self._gather(middle, -self.middle * middle - change, buckets)

    def levels(self, x: Array, y: Array, *, direction: bool = False) -> Array:
        """The limited corridors and, in parts of `money`, the spans: (n + S,)."""
        left = (x[self.at] - self.end * y[self.at]) * self.inside
        if not direction:
            left = left + self.untouched
        level = self.rows @ left
        if not direction:
            level = level + self.constant[:, None]
        return np.concatenate((level[self.limited], self.money * self.spans.parts(x, y)))

    def pull_levels(self, price: Array, buckets: int) -> tuple[Array, Array]:
        """Transpose of `levels` in a direction."""
        count = len(self.limited[0])
        full = np.zeros(self.lower.shape)
        full[self.limited] = price[:count]
        on_left = (self.rows.T @ full) * self.inside
        by_x, by_y = self._gather(on_left, -self.end * on_left, buckets)
        self.spans.pull(self.money * price[count:], by_x, by_y)
        return by_x, by_y

    def _gather(self, by_x: Array, by_y: Array, buckets: int) -> tuple[Array, Array]:
        at = self.at.ravel()
        gathered = (np.bincount(at, value.ravel(), minlength=buckets) for value in (by_x, by_y))
        first, second = (np.asarray(value, dtype=float) for value in gathered)
        return first, second

    def scaled(self, unit: float) -> Coupling:
        """The same in units of `unit` of money."""
        return replace(
            self,
            loadings=self.loadings / unit,
            rows=self.rows / unit,
            constant=self.constant / unit,
            lower=self.lower / unit,
            upper=self.upper / unit,
        )
