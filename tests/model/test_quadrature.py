"""The quadrature's accuracy, as claimed where it is defined."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from scheduler.model.quadrature import node_class, nodes
from scheduler.model.ragged import Array

EXPONENTS = (0.05, 0.3, 0.489, 0.5, 0.6, 1.0, 2.0)
# old imbalance and slice, in fractions of an order
MIXES = ((0.0, 1.0), (1e-3, 0.999), (1e-2, 0.99), (0.1, 0.9), (0.3, 0.7), (0.5, 0.1), (0.9, 0.1))
ONLY_OLD = (1.0, 0.0)


def _path(u: Array | float, theta: float, old: float, new: float) -> Array | float:
    return old * np.exp(-theta * u) - new * np.expm1(-theta * u) / theta


def _exact(theta: float, old: float, new: float, power: float) -> float:
    """theta int_0^1 Z^power du with s = sqrt(u), in pieces where Z moves on one scale."""
    edges = [0.0, *(np.sqrt(c / theta) for c in (0.1, 1, 4, 10, 40) if c < theta), 1.0]
    integrand = lambda s: _path(s * s, theta, old, new) ** power * 2.0 * s  # noqa: E731
    return theta * sum(
        quad(integrand, a, b, epsabs=1e-13, epsrel=1e-11, limit=100)[0] for a, b in pairwise(edges)
    )


def _worst_error(theta: float) -> float:
    fraction, weight = (a[:, 0] for a in nodes(np.array([theta])))
    return max(
        abs(
            theta * weight @ _path(fraction, theta, *mix) ** (1.0 + delta)
            - _exact(theta, *mix, 1.0 + delta)
        )
        for delta in EXPONENTS
        for mix in (*MIXES, ONLY_OLD)
    )


@pytest.mark.parametrize(
    ("theta", "claimed"),
    [(1e-6, 5e-6), (0.05, 5e-6), (0.5, 5e-6), (0.6, 2e-6), (2.0, 2e-6), (2.1, 2e-7), (4.0, 2e-7)],
)
def test_short_buckets_are_as_accurate_as_claimed(theta: float, claimed: float) -> None:
    """Error of theta int |Z|^{1+delta} du relative to Q^{1+delta}, delta from 0.05 to 2."""
    assert _worst_error(theta) < claimed


@pytest.mark.parametrize("theta", [4.5, 9.0, 30.0, 100.0, 1e3, 1e4])
def test_long_buckets_meet_the_bound_on_any_schedule(theta: float) -> None:
    """Within 1e-5 of Q^{1+delta} however long the bucket."""
    assert _worst_error(theta) < 1e-5


def test_rule_is_exact_for_an_order_that_starts_from_rest() -> None:
    """u^{3/2}, as |Z|^{1+delta} grows at first, and polynomials up to degree 3."""
    fraction, weight = (a[:, 0] for a in nodes(np.array([0.1])))
    for power in (0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0):
        assert weight @ fraction**power == pytest.approx(1.0 / (1.0 + power), rel=1e-14)


def test_buckets_of_unlike_length_can_share_an_array() -> None:
    """Each column is a rule on [0, 1] of its own, also where the longest needs many pieces."""
    theta = np.array([1e4, 0.0, 0.3, 70.0, 5.0])
    fraction, weight = nodes(theta)
    assert weight.sum(axis=0) == pytest.approx(np.ones(5), rel=1e-13)
    assert ((fraction >= 0.0) & (fraction <= 1.0)).all()
    assert (weight >= 0.0).all()
    for column, t in enumerate(theta):
        if t > 0.0:
            got = t * weight[:, column] @ _path(fraction[:, column], t, 0.3, 0.7) ** 1.5
            assert got == pytest.approx(_exact(t, 0.3, 0.7, 1.5), abs=1e-6)


def test_orders_of_one_class_use_equally_many_nodes() -> None:
    """What lets a batch be sorted by class without any order's figures depending on the batch."""
    thetas = np.concatenate((10.0 ** np.linspace(-3, 4, 300), [0.5, 2.0, 4.0, 8.0, 64.0]))
    ranks = node_class(thetas)
    counts = np.array([len(nodes(np.array([t]))[0]) for t in thetas])
    for rank in np.unique(ranks):
        assert len(set(counts[ranks == rank])) == 1
