"""Newton systems in flat-output form: one band matrix of half-bandwidth 2 for all orders.

The dynamics x_t = x_{t-1} - y_t, z_t = a_t z_{t-1} + b_t y_t have the flat output

    v_{t-1} = x_t + z_t / b_t.

Let s_t = -z_t/b_t (for directions, which start from x_0 = z_0 = 0). Substituting gives, with
kappa_t = 1 - b_t a_{t+1}/b_{t+1},

    v_t = v_{t-1} + kappa_t s_t,   x_t = v_{t-1} + s_t,   z_t = -b_t s_t,
    y_t = (1 - kappa_{t-1}) s_{t-1} - s_t,

so every direction that obeys the dynamics is a local function of (v_{t-2}, v_{t-1}, v_t), and
kappa = 1, v_T = 0 at an order's last bucket says x_T = 0: all of it is traded. A Hessian that
is block-diagonal over buckets in (x_{t-1}, z_{t-1}, y_t) becomes an SPD matrix of
half-bandwidth 2 in v; orders do not touch, so all of them stack into one LAPACK band factorisation.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg.lapack import dpbtrf, dpbtrs

from scheduler.model.ragged import Array, Index
from scheduler.problem import Problem

# upper triangle of a symmetric 3 x 3 matrix, in the order used for stage Hessians
PAIRS = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))


class FlatSystem:
    """Maps between bucket directions and the flat output, and factors the band matrix."""

    def __init__(self, problem: Problem) -> None:
        layout = problem.layout
        self.first, self.last, self.size = layout.first, layout.last, layout.size
        self.kappa, self.gain = problem.kappa, problem.gain
        self.previous = 1.0 - problem.kappa  # coefficient of s_t in y_{t+1}
        self.coefficients = self._band_coefficients()
        self.factor_band: Array = np.empty((3, 0))

    def stage_map(self) -> Array:
        """(3, 3, M): (x_{t-1}, z_{t-1}, y_t) from (v_{t-2}, v_{t-1}, v_t)."""
        size = len(self.kappa)
        inverse = 1.0 / self.kappa
        before = np.roll(inverse, 1)
        previous, gain = np.roll(self.previous, 1), np.roll(self.gain, 1)
        stage = np.zeros((3, 3, size))
        stage[0, 0], stage[0, 1] = 1.0 - before, before
        stage[1, 0], stage[1, 1] = gain * before, -gain * before
        stage[2, 0] = -previous * before
        stage[2, 1] = previous * before + inverse
        stage[2, 2] = -inverse
        stage[:2, :, self.first] = 0.0  # the state at time zero is given
        stage[:, :2, self.first] = 0.0  # v_0 = 0
        stage[:, 0, self.first[self.size > 1] + 1] = 0.0
        stage[:, 2, self.last] = 0.0  # v_T = 0
        return stage

    def _band_coefficients(self) -> Array:
        """(6, 6, M): band contributions of a bucket, linear in its stage Hessian."""
        stage = self.stage_map()
        outer = np.einsum("kim,ljm->klijm", stage, stage)
        i, j = np.array(PAIRS).T
        rows, columns = i[None, :], j[None, :]
        result: Array = outer[rows, columns, i[:, None], j[:, None]]
        mixed = i != j
        result[:, mixed] += outer[columns, rows, i[:, None], j[:, None]][:, mixed]
        return result

    def assemble(self, stage_hessian: Array) -> Array:
        """Lower band (3, M) of the matrix in v from the stage Hessians (6, M)."""
        terms: Array = np.einsum("oim,im->om", self.coefficients, stage_hessian)
        band: Array = np.zeros((3, terms.shape[1]))
        band[0] = terms[5]
        band[0, :-1] += terms[3, 1:]
        band[0, :-2] += terms[0, 2:]
        band[1, :-1] = terms[4, 1:]
        band[1, :-2] += terms[1, 2:]
        band[2, :-2] = terms[2, 2:]
        band[0, self.last] = 1.0
        return band

    def factor(self, band: Array) -> int:
        """Cholesky factor of the band; 0, or 1 + the position of the first bad pivot."""
        self.factor_band, failure = dpbtrf(band, lower=1, overwrite_ab=1)
        return int(failure)

    def solve(self, right: Array) -> Array:
        """v for right-hand sides (K, M) in v."""
        solution, _ = dpbtrs(self.factor_band, right.T, lower=1)
        result: Array = solution.T
        return result

    def pull_back(self, stage: Array) -> Array:
        """Transpose of `lift`: stage gradients (3, ..., M) to gradients in v (..., M).

        Entries 0 and 1 at an order's first bucket must be 0.
        """
        along_x, along_z, along_y = stage
        in_s: Array = -along_y
        in_s[..., :-1] += (
            along_x[..., 1:]
            - self.gain[:-1] * along_z[..., 1:]
            + self.previous[:-1] * along_y[..., 1:]
        )
        in_s /= self.kappa
        in_v: Array = in_s
        in_v[..., :-1] -= in_s[..., 1:].copy()
        in_v[..., :-2] += along_x[..., 2:]
        in_v[..., self.last] = 0.0
        return in_v

    def lift(self, v: Array) -> Array:
        """Directions (3, ..., M) of x_{t-1}, z_{t-1}, y_t for flat outputs v (..., M)."""
        stage = np.zeros((3, *v.shape))
        s = v.copy()
        s[..., 1:] -= v[..., :-1]
        s /= self.kappa
        stage[0, ..., 1:] = s[..., :-1]
        stage[0, ..., 2:] += v[..., :-2]
        stage[1, ..., 1:] = -self.gain[:-1] * s[..., :-1]
        stage[2] = -s
        stage[2, ..., 1:] += self.previous[:-1] * s[..., :-1]
        stage[:2, ..., self.first] = 0.0
        return stage


def owner_of(failure: int, first: Index) -> int:
    """The order that holds the bad pivot reported by `FlatSystem.factor`."""
    return int(np.searchsorted(first, failure - 1, side="right")) - 1
