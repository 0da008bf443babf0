"""Newton systems of names that share factor risk and corridors.

The matrix in the flat output is H + C'XC: H the stacked band matrix of all names, C the few rows
per interval that couple them (factors at the middle of each interval and across it, corridors at
its end), X their weights. With tau the solution of

    (X^{-1} + C H^{-1} C') tau = C h,   h = H^{-1} r,

the solution is h - H^{-1} C' tau. Corridor rows are eliminated exactly, by a dense matrix, because
tight corridors make them stiff; factor rows are left to conjugate gradients with the diagonal of
their matrix, which takes a handful of steps at the tolerances that suffice.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from scheduler.coupling import Coupling
from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem
from scheduler.solve.flat import FlatSystem

_NAMES_AT_ONCE = 128
_MOST_STEPS = 200
_RIDGE = 1e-14


class CoupledSystem:
    """Solves with H + C'XC, H as factored in `flat`."""

    def __init__(self, problem: Problem, coupling: Coupling, flat: FlatSystem) -> None:
        self.problem, self.coupling, self.flat = problem, coupling, flat
        self.buckets = problem.layout.entries
        self.stage_map = flat.stage_map()
        self.steps = 0
        self.has_factors = coupling.loadings.shape[1] > 0
        self.has_corridors = len(coupling.bounds[0]) > 0

    def prepare(self, factor_weight: float, corridor_weight: Array) -> None:
        """Take over a new factorisation of H, the factors' weight and the corridors' (n,)."""
        self.factor_weight = factor_weight
        self.active = self.has_factors and factor_weight > 0.0
        if self.active:
            self.diagonal = 1.0 / factor_weight + self._factor_diagonal()
        self.root = np.sqrt(np.maximum(corridor_weight, 1e-300))
        if self.has_corridors:
            # with D = sqrt(X), I + D S D: rows whose weight is nil stay harmless
            dense = self._corridor_matrix()
            dense = self.root[:, None] * dense * self.root + np.eye(len(self.root))
            self.corridor_factor = _factor(dense)

    def solve(
        self, right: Array, tolerance: float, offset: Array | None = None
    ) -> tuple[Array, Array]:
        """v with (H + C'XC) v = right - C_c' X_c offset, to a relative tolerance in the factor
        rows; and offset + C_c v.

        Stiff rows would drown `right`, and C_c v keeps none of their digits: both go by way of the
        multipliers tau = X_c (offset + C_c v), of which (1/X_c + S) tau = C_c h + offset.
        """
        v, price = self._corridors_too(self.flat.solve(right[None])[0], offset)
        if self.active:
            tau = self._conjugate_gradients(self._exposures(v), tolerance)
            image, change = self._corridors_too(self.flat.solve(self._pull_exposures(tau)[None])[0])
            v, price = v - image, price - change
        return v, price / self.root**2

    def _corridors_too(self, h: Array, offset: Array | None = None) -> tuple[Array, Array]:
        """From H^{-1} r to v of (H + C_c' X_c C_c) v = r - C_c' X_c offset, and tau_c."""
        if not self.has_corridors:
            return h, np.zeros(0)
        level = self._levels(h)
        scaled = self.root * (level if offset is None else level + offset)
        price = self.root * cho_solve(self.corridor_factor, scaled)
        return h - self.flat.solve(self._pull_levels(price)[None])[0], price

    def _conjugate_gradients(self, target: Array, tolerance: float) -> Array:
        """(1/X_f + C_f A^{-1} C_f') tau = target, A = H + C_c' X_c C_c."""
        tau = np.zeros_like(target)
        residual = target.copy()
        z = residual / self.diagonal
        toward, product = z, float(np.vdot(residual, z))
        goal = tolerance**2 * product
        for _ in range(_MOST_STEPS):
            if product <= goal or product <= 0.0:
                break
            image, _ = self._corridors_too(self.flat.solve(self._pull_exposures(toward)[None])[0])
            applied = toward / self.factor_weight + self._exposures(image)
            step = product / float(np.vdot(toward, applied))
            tau += step * toward
            residual -= step * applied
            z = residual / self.diagonal
            product, before = float(np.vdot(residual, z)), product
            toward = z + (product / before) * toward
            self.steps += 1
        return tau

    # the rows of C, as maps of the flat output

    def _exposures(self, v: Array) -> Array:
        x, _, y = self.flat.lift(v)
        return self.coupling.exposures(x, y, direction=True)

    def _levels(self, v: Array) -> Array:
        x, _, y = self.flat.lift(v)
        return self.coupling.levels(x, y, direction=True)

    def _pull_exposures(self, price: Array) -> Array:
        return self._pull(*self.coupling.pull_exposures(price, self.buckets))

    def _pull_levels(self, price: Array) -> Array:
        return self._pull(*self.coupling.pull_levels(price, self.buckets))

    def _pull(self, by_x: Array, by_y: Array) -> Array:
        stage = np.stack((by_x, np.zeros(self.buckets), by_y))
        stage[:2, self.problem.layout.first] = 0.0
        return self.flat.pull_back(stage)

    # the matrices of C H^{-1} C'

    def _factor_diagonal(self) -> Array:
        """Diagonal of C_f H^{-1} C_f', (K, 2T), from variances of x and y within each bucket."""
        coupling = self.coupling
        var_x, cov, var_y = (value[coupling.at] * coupling.inside for value in self._variances())
        u = coupling.middle
        middle = np.maximum(var_x - 2.0 * u * cov + u * u * var_y, 0.0)
        change = coupling.span**2 * var_y
        square = coupling.weight**2
        both = np.concatenate((square * middle, square * change), axis=1)
        result: Array = (coupling.loadings**2).T @ both
        return result

    def _variances(self) -> tuple[Array, Array, Array]:
        """Variances of x_{t-1} and y_t and their covariance under H^{-1}, (M,) each."""
        z = self._inverse_band()
        size = self.buckets
        cov = np.zeros((3, 3, size))
        cov[2, 2] = z[0]
        cov[1, 1, 1:], cov[1, 2, 1:] = z[0, :-1], z[1, :-1]
        cov[0, 0, 2:], cov[0, 1, 2:], cov[0, 2, 2:] = z[0, :-2], z[1, :-2], z[2, :-2]
        cov[1, 0], cov[2, 0], cov[2, 1] = cov[0, 1], cov[0, 2], cov[1, 2]
        maps = self.stage_map
        x, y = maps[0], maps[2]
        along_x = np.einsum("ijm,jm->im", cov, x)
        along_y = np.einsum("ijm,jm->im", cov, y)
        return (x * along_x).sum(axis=0), (y * along_x).sum(axis=0), (y * along_y).sum(axis=0)

    def _inverse_band(self) -> Array:
        """The band of H^{-1}, (3, M), by the recursion of Takahashi, Fagan and Chin (1973)."""
        factor = self.flat.factor_band
        layout = self.problem.layout
        inverse = np.zeros_like(factor)
        low = factor[1] / factor[0]
        lower = factor[2] / factor[0]
        square = 1.0 / factor[0] ** 2
        longest = int(layout.size.max())
        for back in range(longest):
            orders = layout.size > back
            j = layout.last[orders] - back
            if back == 0:
                inverse[0, j] = square[j]
                continue
            a, b = low[j], lower[j]
            if back == 1:
                inverse[1, j] = -a * inverse[0, j + 1]
                inverse[0, j] = square[j] - a * inverse[1, j]
                continue
            inverse[2, j] = -a * inverse[1, j + 1] - b * inverse[0, j + 2]
            inverse[1, j] = -a * inverse[0, j + 1] - b * inverse[1, j + 1]
            inverse[0, j] = square[j] - a * inverse[1, j] - b * inverse[2, j]
        return inverse

    def _corridor_matrix(self) -> Array:
        """C_c H^{-1} C_c', (n + S, n + S): corridors first, then spans."""
        if not len(self.coupling.limited[0]):
            return self._span_matrix()[1]
        among = self._among_corridors()
        if not len(self.coupling.spans.least):
            return among
        mixed, own = self._span_matrix()
        return np.block([[among, mixed], [mixed.T, own]])

    def _span_matrix(self) -> tuple[Array, Array]:
        """(n, S) and (S, S) parts of C_c H^{-1} C_c' that have to do with spans.

        A span moves one name only, so spans of different names share a right-hand side.
        """
        coupling, spans, money = self.coupling, self.coupling.spans, self.coupling.money
        name = self.problem.layout.owner[spans.first]
        rows, ends = coupling.limited
        mixed, own = np.zeros((len(rows), len(name))), np.zeros((len(name), len(name)))
        turn = np.array([np.count_nonzero(name[:i] == name[i]) for i in range(len(name))])
        for number in range(int(turn.max()) + 1):
            here = np.flatnonzero(turn == number)
            by_x, by_y = np.zeros(self.buckets), np.zeros(self.buckets)
            spans.pull(np.where(turn == number, money, 0.0), by_x, by_y)
            x, _, y = self.flat.lift(self.flat.solve(self._pull(by_x, by_y)[None])[0])
            at, moves = coupling.at[name[here]], coupling.inside[name[here]]
            left = (x[at] - coupling.end[name[here]] * y[at]) * moves
            mixed[:, here] = (coupling.rows[rows][:, name[here]].T * left[:, ends]).T
            own[:, here] = money * spans.parts(x, y)[:, None] * (name[:, None] == name[here])
        return mixed, own

    def _among_corridors(self) -> Array:
        """With H = L L' and Y = L^{-1} P', sum_i a_ri a_si Y_i' Y_i, (n, n)."""
        coupling, layout = self.coupling, self.problem.layout
        rows, ends = coupling.limited
        used = np.unique(ends)
        place = np.searchsorted(used, ends)
        first, second = np.triu_indices(coupling.rows.shape[0])
        products = coupling.rows[first] * coupling.rows[second]
        total = np.zeros((len(first), len(used) ** 2))
        for low in range(0, len(layout.size), _NAMES_AT_ONCE):
            names = np.arange(low, min(low + _NAMES_AT_ONCE, len(layout.size)))
            total += products[:, names] @ self._edge_covariance(names, used)
        pair = np.zeros((coupling.rows.shape[0],) * 2, dtype=np.int64)
        pair[first, second] = pair[second, first] = np.arange(len(first))
        flat = total.reshape(len(first), len(used), len(used))
        result: Array = flat[pair[rows[:, None], rows], place[:, None], place]
        return result

    def _edge_covariance(self, names: Index, used: Index) -> Array:
        """(n, E*E) covariance of x at the used edges under H^{-1}, name by name."""
        y = self._half_solved(names, used)
        covariance: Array = np.matmul(y.transpose(0, 2, 1), y)
        return covariance.reshape(len(names), -1)

    def _half_solved(self, names: Index, used: Index) -> Array:
        """Y = L^{-1} P' of some names, (n, T, E): rows of all names at once.

        The column of an edge starts two rows before its bucket, so that rows are prefixes.
        """
        coupling, layout = self.coupling, self.problem.layout
        first, size = layout.first[names], layout.size[names]
        longest = int(size.max())
        right = np.zeros((len(names), longest, len(used)))
        bucket, share = (value[np.ix_(names, used)] for value in (coupling.bucket, coupling.end))
        at = np.maximum(bucket, 0)
        name, edge = (
            np.broadcast_to(axis, bucket.shape) for axis in np.ogrid[: len(names), : len(used)]
        )
        for back in range(3):
            value = self.stage_map[0, 2 - back, at] - share * self.stage_map[2, 2 - back, at]
            row = at - back - first[:, None]
            keep = (bucket >= 0) & (row >= 0)
            right[name[keep], row[keep], edge[keep]] += value[keep]
        start: Index = np.where(bucket >= 0, at - 2 - first[:, None], longest).min(axis=0)
        position = np.minimum(first + np.arange(longest)[:, None], layout.last[names])
        band = self.flat.factor_band[:, position]
        for j in range(longest):
            count = int(np.flatnonzero(start <= j).max(initial=-1)) + 1
            here = right[:, j, :count]
            for back in range(1, min(j, 2) + 1):
                here -= band[back, j - back][:, None] * right[:, j - back, :count]
            here /= band[0, j][:, None]
            if (size <= j).any():
                here[size <= j] = 0.0
        return right


def _factor(matrix: Array) -> tuple[Array, bool]:
    """Cholesky factor; rows that say the same to rounding get a ridge until it exists."""
    ridge = _RIDGE * float(np.trace(matrix))
    while True:
        try:
            factor, lower = cho_factor(matrix, lower=True)
            return factor, lower
        except LinAlgError:
            matrix = matrix + ridge * np.eye(len(matrix))
            ridge *= 100.0
