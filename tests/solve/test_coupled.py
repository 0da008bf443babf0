"""Systems of names that share rows, against dense linear algebra; and the rows' transposes."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from scheduler.model.ragged import Array
from scheduler.solve.coupled import CoupledSystem
from scheduler.solve.evaluate import Evaluator
from scheduler.solve.flat import FlatSystem
from tests.solve.lists import (
    Linked,
    corridors_around,
    factor_variance,
    feasible_fractions,
    left,
    levels,
    random_list,
)

SEEDS = range(6)


def _listed(seed: int, *, names: int = 4, factors: int = 3, corridors: int = 3) -> Linked:
    """Names of all kinds: late, early, with stages that cannot trade, one of a single bucket."""
    listed = random_list(seed, names=names, buckets=7 - seed % 2, factors=factors, uneven=True)
    y = feasible_fractions(listed.problem, seed)
    return corridors_around(listed, y, corridors, 0.1, seed) if corridors else listed


class Dense:
    """H and the rows of C as full matrices in v, entries of last buckets left out."""

    def __init__(self, listed: Linked, seed: int) -> None:
        problem, layout = listed.problem, listed.problem.layout
        y = feasible_fractions(problem, seed)
        x = layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size)))
        z = layout.before(layout.scan(problem.decay, problem.gain * y, problem.initial), 0.0)
        evaluator, flat = Evaluator(problem), FlatSystem(problem)
        stage = evaluator.hessian(evaluator.point(x, z, y), np.full(1, 0.3))
        stage[5] += np.random.default_rng(seed).uniform(0.1, 10.0, len(y))
        band = flat.assemble(stage)
        self.matrix = np.diag(band[0])
        for away in (1, 2):
            self.matrix += np.diag(band[away][:-away], -away) + np.diag(band[away][:-away], away)
        assert flat.factor(band.copy()) == 0
        self.system = CoupledSystem(problem, listed.coupling, flat)
        self.free = np.setdiff1d(np.arange(layout.entries), layout.last)
        self.inverse = np.linalg.inv(self.matrix)

    def rows(self, operator: Callable[[Array], Array]) -> Array:
        """(rows, M) matrix of a linear map of v; v is 0 at the last bucket of every name."""
        size = len(self.matrix)
        columns = np.zeros((operator(np.zeros(size)).size, size))
        for at in self.free:
            columns[:, at] = operator(np.eye(size)[at]).ravel()
        return columns


@pytest.mark.parametrize("seed", SEEDS)
def test_exposures_are_those_of_what_is_left(seed: int) -> None:
    """Their squares add up to the integral of the factors' variance; middles are f at half."""
    listed = _listed(seed)
    layout, coupling = listed.problem.layout, listed.coupling
    y = feasible_fractions(listed.problem, seed)
    x = layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size)))
    exposure = coupling.exposures(x, y)
    begin, end = left(listed, y)
    half = exposure.shape[1] // 2
    middle = coupling.loadings.T @ (coupling.weight * (begin + end) / 2.0)
    assert exposure[:, :half] == pytest.approx(middle)
    change = coupling.loadings.T @ (coupling.weight * (end - begin)) / np.sqrt(12.0)
    assert exposure[:, half:] == pytest.approx(change)
    assert np.vdot(exposure, exposure) == pytest.approx(factor_variance(listed, y))


@pytest.mark.parametrize("seed", SEEDS)
def test_levels_are_sums_of_what_is_left(seed: int) -> None:
    """At the ends of the intervals that have a bound, and only there."""
    listed = _listed(seed)
    layout, coupling = listed.problem.layout, listed.coupling
    y = feasible_fractions(listed.problem, seed)
    x = layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size)))
    found = coupling.levels(x, y)
    assert 0 < len(found) < coupling.lower.size
    assert found == pytest.approx(levels(listed, y)[coupling.limited])


@pytest.mark.parametrize("seed", SEEDS)
def test_pulls_are_the_transposes(seed: int) -> None:
    """<C d, price> = <d, C' price> for any direction, factor rows and corridor rows."""
    listed = _listed(seed)
    coupling, count = listed.coupling, listed.problem.layout.entries
    rng = np.random.default_rng(seed)
    x, y = rng.standard_normal((2, count))
    for rows, pull in (
        (coupling.exposures(x, y, direction=True), coupling.pull_exposures),
        (coupling.levels(x, y, direction=True), coupling.pull_levels),
    ):
        price = rng.standard_normal(rows.shape)
        by_x, by_y = pull(price, count)
        assert np.vdot(rows, price) == pytest.approx(x @ by_x + y @ by_y, rel=1e-12, abs=1e-9)


def test_a_direction_is_a_difference_of_states() -> None:
    """Names that have not begun, and constants, drop out of it."""
    listed = _listed(1)
    layout, coupling = listed.problem.layout, listed.coupling
    states = []
    for seed in (1, 2):
        y = feasible_fractions(listed.problem, seed)
        states.append((layout.before(1.0 - layout.cumsum(y), np.ones(len(layout.size))), y))
    (x0, y0), (x1, y1) = states
    assert coupling.untouched.any()
    for measure in (coupling.exposures, coupling.levels):
        change = measure(x1 - x0, y1 - y0, direction=True)
        assert change == pytest.approx(measure(x1, y1) - measure(x0, y0), abs=1e-9)


@pytest.mark.parametrize("seed", SEEDS)
def test_maps_of_the_flat_output_are_adjoint(seed: int) -> None:
    """_pull_exposures and _pull_levels against the matrices of _exposures and _levels."""
    listed = _listed(seed)
    dense = Dense(listed, seed)
    system, rng = dense.system, np.random.default_rng(seed)
    for operator, pull in (
        (system._exposures, system._pull_exposures),
        (system._levels, system._pull_levels),
    ):
        rows = dense.rows(operator)
        price = rng.standard_normal(operator(np.zeros(len(dense.matrix))).shape)
        pulled = pull(price)[dense.free]
        scale = np.abs(rows).max()
        assert pulled == pytest.approx((rows.T @ price.ravel())[dense.free], abs=1e-12 * scale)


@pytest.mark.parametrize("seed", SEEDS)
def test_band_of_the_inverse(seed: int) -> None:
    """Diagonal and two side diagonals of H^-1, within each name."""
    listed = _listed(seed)
    dense = Dense(listed, seed)
    found, owner = dense.system._inverse_band(), listed.problem.layout.owner
    for away in range(3):
        same = owner[away:] == owner[: len(owner) - away]
        expected = np.diag(dense.inverse, away)[same]
        scale = np.abs(np.diag(dense.inverse)).max()
        assert found[away][: len(owner) - away][same] == pytest.approx(expected, abs=1e-12 * scale)


@pytest.mark.parametrize("seed", SEEDS)
def test_diagonal_of_the_factor_rows(seed: int) -> None:
    """The preconditioner: diagonal of C_f H^-1 C_f'."""
    dense = Dense(_listed(seed), seed)
    rows = dense.rows(dense.system._exposures)
    expected = np.diag(rows @ dense.inverse @ rows.T)
    found = dense.system._factor_diagonal().ravel()
    assert found == pytest.approx(expected, rel=1e-9, abs=1e-12 * expected.max())


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("at_once", [1, 3, 128])
def test_matrix_of_the_corridor_rows(
    seed: int, at_once: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """C_c H^-1 C_c' in full, however many names are taken at once."""
    monkeypatch.setattr("scheduler.solve.coupled._NAMES_AT_ONCE", at_once)
    dense = Dense(_listed(seed), seed)
    rows = dense.rows(dense.system._levels)
    expected = rows @ dense.inverse @ rows.T
    found = dense.system._corridor_matrix()
    assert found == pytest.approx(expected, abs=1e-12 * np.abs(expected).max())


def _exactly(whole: Array, rows: Array, weight: Array, right: Array) -> tuple[Array, Array]:
    """v and X C v of (A + C'XC) v = r, in extended precision.

    By way of [A  C'; C  -1/X] (v, X C v) = (r, 0), eliminated with pivots: no stiff sum is formed.
    """
    size = len(whole)
    matrix = np.block([[whole, rows.T], [rows, -np.diag(1.0 / weight)]]).astype(np.longdouble)
    value = np.concatenate((right, np.zeros(len(rows)))).astype(np.longdouble)
    for k in range(len(value)):
        best = k + int(np.abs(matrix[k:, k]).argmax())
        matrix[[k, best]], value[[k, best]] = matrix[[best, k]], value[[best, k]]
        part = matrix[k + 1 :, k] / matrix[k, k]
        matrix[k + 1 :] -= part[:, None] * matrix[k]
        value[k + 1 :] -= part * value[k]
    for k in range(len(value) - 1, -1, -1):
        value[k] = (value[k] - matrix[k, k + 1 :] @ value[k + 1 :]) / matrix[k, k]
    return value[:size].astype(float), value[size:].astype(float)


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize(("factors", "corridors"), [(3, 0), (0, 3), (3, 3), (0, 0)])
@pytest.mark.parametrize(("largest", "within"), [(1.0, 1e-10), (1e4, 1e-6)])
def test_solution_of_the_whole_system(
    seed: int, factors: int, corridors: int, largest: float, within: float
) -> None:
    """(H + 2 C_f'C_f + C_c' X C_c) v = r, and the corridors' X C v; levels run to 1e4."""
    dense = Dense(_listed(seed, factors=factors, corridors=corridors), seed)
    rng = np.random.default_rng(seed)
    rows = dense.rows(dense.system._levels)
    weight = largest * rng.uniform(0.01, 1.0, len(rows))
    _compare(dense, weight, within, rng)


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("weight", [1e8, 1e12])
def test_stiff_corridors_are_as_good_as_equalities(seed: int, weight: float) -> None:
    """Three rows of a large weight among others that do not bind: the multipliers are right."""
    dense = Dense(_listed(seed, corridors=4), seed)
    rng = np.random.default_rng(seed)
    rows = dense.rows(dense.system._levels)
    weights = rng.uniform(1e-13, 1e-12, len(rows))
    stiff = rng.choice(np.flatnonzero(np.abs(rows).max(axis=1) > 0.0), 3, replace=False)
    weights[stiff] = weight
    _compare(dense, weights, 1e-6, rng)


def _compare(dense: Dense, weight: Array, within: float, rng: np.random.Generator) -> None:
    """Solve for a random right-hand side; v and X C v to a part of their largest."""
    factor_rows = dense.rows(dense.system._exposures)
    whole = dense.matrix + 2.0 * factor_rows.T @ factor_rows
    right = rng.standard_normal(len(dense.matrix))
    right[np.setdiff1d(np.arange(len(right)), dense.free)] = 0.0
    expected, price = _exactly(whole, dense.rows(dense.system._levels), weight, right)
    dense.system.prepare(2.0, weight)
    v, change = dense.system.solve(right, 1e-12)
    assert v == pytest.approx(expected, abs=within * np.abs(expected).max())
    assert change * weight == pytest.approx(price, abs=within * np.abs(price).max(initial=0.0))


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("weight", [1.0, 1e6, 1e16])
def test_corridors_far_from_their_goal(seed: int, weight: float) -> None:
    """(H + C'XC) v = r - C'X offset: offset + C v keeps its digits however large X is."""
    dense = Dense(_listed(seed, factors=0), seed)
    rng = np.random.default_rng(seed)
    every = dense.rows(dense.system._levels)
    stiff = rng.choice(np.flatnonzero(np.abs(every).max(axis=1) > 0.0), 3, replace=False)
    weights = np.full(len(every), 1e-12)
    weights[stiff] = weight
    right = rng.standard_normal(len(dense.matrix))
    right[np.setdiff1d(np.arange(len(right)), dense.free)] = 0.0
    offset = np.zeros(len(every))
    offset[stiff] = 1e3 * rng.standard_normal(3)
    rows = every[stiff]
    schur = rows @ dense.inverse @ rows.T + np.eye(3) / weight
    expected = np.linalg.solve(schur, rows @ dense.inverse @ right + offset[stiff])
    dense.system.prepare(0.0, weights)
    v, level = dense.system.solve(right, 1e-12, offset)
    scale = np.abs(expected).max()
    assert level[stiff] * weight == pytest.approx(expected, abs=1e-6 * scale)
    moved = dense.inverse @ (right - rows.T @ expected)
    assert v == pytest.approx(moved, abs=1e-6 * np.abs(moved).max())


def test_rows_without_weight_do_nothing() -> None:
    """Corridors far from their bounds, and no risk: H alone is solved, in no gradient step."""
    dense = Dense(_listed(0), 0)
    right = np.random.default_rng(0).standard_normal(len(dense.matrix))
    dense.system.prepare(0.0, np.zeros(len(dense.rows(dense.system._levels))))
    v, _ = dense.system.solve(right, 1e-12)
    assert v == pytest.approx(dense.inverse @ right, rel=1e-9, abs=1e-12)
    assert dense.system.steps == 0


def test_looser_solutions_take_fewer_steps() -> None:
    """Of conjugate gradients over the factor rows."""
    steps = []
    for tolerance in (1e-1, 1e-3, 1e-8):
        dense = Dense(_listed(0, names=6), 0)
        system = dense.system
        system.prepare(2.0, np.ones(len(dense.rows(system._levels))))
        system.solve(np.random.default_rng(0).standard_normal(len(dense.matrix)), tolerance)
        steps.append(system.steps)
    assert steps[0] < steps[1] < steps[2]
