"""Flat-array operations against plain loops over each order."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scheduler.model.ragged import Array, Ragged

sizes = st.lists(st.integers(1, 40), min_size=1, max_size=7)
seeds = st.integers(0, 2**32 - 1)


def _layout(sizes: list[int], seed: int) -> tuple[Ragged, np.random.Generator]:
    return Ragged(np.array(sizes)), np.random.default_rng(seed)


def _pieces(layout: Ragged, values: Array) -> list[Array]:
    return np.split(values, layout.first[1:])


@given(sizes, seeds)
def test_scan_is_the_recursion_of_each_order(sizes: list[int], seed: int) -> None:
    """e_t = d_t e_{t-1} + i_t, started anew from each order's own state."""
    layout, rng = _layout(sizes, seed)
    decay = rng.uniform(0.0, 1.0, layout.entries)
    inflow = rng.standard_normal(layout.entries)
    initial = rng.standard_normal(len(sizes))
    expected, m = np.empty(layout.entries), 0
    for i, size in enumerate(sizes):
        state = initial[i]
        for _ in range(size):
            state = decay[m] * state + inflow[m]
            expected[m] = state
            m += 1
    kept = decay.copy(), inflow.copy()
    assert layout.scan(decay, inflow, initial) == pytest.approx(expected, rel=1e-12, abs=1e-13)
    assert (decay == kept[0]).all()
    assert (inflow == kept[1]).all()


@given(sizes, seeds)
def test_reverse_scan_is_the_backward_recursion(sizes: list[int], seed: int) -> None:
    """l_t = i_t + d_{t+1} l_{t+1}, nothing coming from the next order."""
    layout, rng = _layout(sizes, seed)
    decay = rng.uniform(0.0, 1.0, layout.entries)
    inflow = rng.standard_normal(layout.entries)
    expected = inflow.copy()
    for first, last in zip(layout.first, layout.last, strict=True):
        for m in range(last - 1, first - 1, -1):
            expected[m] += decay[m + 1] * expected[m + 1]
    assert layout.reverse_scan(decay, inflow) == pytest.approx(expected, rel=1e-12, abs=1e-13)


@given(sizes, seeds)
def test_reverse_scan_is_the_transpose_of_scan(sizes: list[int], seed: int) -> None:
    """w' scan(v) = reverse_scan(w)' v: what an adjoint must satisfy."""
    layout, rng = _layout(sizes, seed)
    decay = rng.uniform(0.0, 1.0, layout.entries)
    v, w = rng.standard_normal((2, layout.entries))
    forward = w @ layout.scan(decay, v, np.zeros(len(sizes)))
    assert layout.reverse_scan(decay, w) @ v == pytest.approx(forward, rel=1e-10, abs=1e-10)


@given(sizes, seeds)
def test_cumsum_and_reductions_stay_within_each_order(sizes: list[int], seed: int) -> None:
    layout, rng = _layout(sizes, seed)
    values = rng.standard_normal(layout.entries)
    pieces = _pieces(layout, values)
    assert layout.cumsum(values) == pytest.approx(np.concatenate([np.cumsum(p) for p in pieces]))
    assert layout.sum(values) == pytest.approx([p.sum() for p in pieces])
    assert (layout.max(values) == [p.max() for p in pieces]).all()
    assert (layout.min(values) == [p.min() for p in pieces]).all()
    stacked = np.stack((values, -values))
    assert layout.sum(stacked)[1] == pytest.approx(-layout.sum(values))


@given(sizes, seeds)
def test_before_shifts_each_order_and_puts_its_initial_state_first(
    sizes: list[int], seed: int
) -> None:
    layout, rng = _layout(sizes, seed)
    after, initial = rng.standard_normal(layout.entries), rng.standard_normal(len(sizes))
    pieces = _pieces(layout, after)
    expected = [np.concatenate(([z], p[:-1])) for z, p in zip(initial, pieces, strict=True)]
    assert (layout.before(after, initial) == np.concatenate(expected)).all()


@given(sizes, seeds)
def test_take_picks_whole_orders_in_the_order_asked_for(sizes: list[int], seed: int) -> None:
    layout, rng = _layout(sizes, seed)
    values = rng.standard_normal(layout.entries)
    chosen = rng.permutation(len(sizes))[: rng.integers(1, len(sizes) + 1)]
    part, at = layout.take(chosen)
    pieces = _pieces(layout, values)
    assert (part.size == layout.size[chosen]).all()
    assert (values[at] == np.concatenate([pieces[i] for i in chosen])).all()


def test_scan_of_strong_decay_neither_overflows_nor_cancels() -> None:
    """A recursion solved by dividing out total decay would overflow here."""
    layout = Ragged(np.array([2000]))
    result = layout.scan(np.full(2000, np.exp(-50.0)), np.ones(2000), np.array([1e6]))
    assert result[-1] == pytest.approx(1.0 / (1.0 - np.exp(-50.0)), rel=1e-15)
    assert (result > 0.0).all()
