"""The knee of a curve, on curves whose knee is known."""

from __future__ import annotations

import numpy as np
import pytest

from scheduler.scenarios import knee


@pytest.mark.parametrize("sign", [1, -1])
def test_a_corner_is_the_knee(sign: int) -> None:
    """Of two straight pieces the point where they meet, from whichever end they are given."""
    risk = np.array([100.0, 70.0, 40.0, 38.0, 36.0])
    cost = np.array([1.0, 1.5, 2.0, 10.0, 18.0])
    assert knee(risk[::sign], cost[::sign]) == 2  # the middle, both ways


def test_the_knee_of_a_quarter_circle_lies_at_45_degrees() -> None:
    """cost = 1 - sqrt(1 - (1 - risk)^2): farthest from the chord in the middle of the arc."""
    angle = np.linspace(0.0, np.pi / 2.0, 91)
    risk, cost = 1.0 - np.sin(angle), 1.0 - np.cos(angle)
    found = knee(risk, cost)
    assert found is not None
    assert angle[found] == pytest.approx(np.pi / 4.0)


def test_the_knee_of_a_hyperbola() -> None:
    """cost = 1/risk on [1/b, b] is symmetric: risk 1, whatever the units."""
    risk = np.geomspace(1.0 / 7.0, 7.0, 41)[::-1]
    assert knee(risk, 1.0 / risk) == 20
    assert knee(1e3 * risk, 50.0 + 1e-2 / risk) == 20


@pytest.mark.parametrize(
    ("risk", "cost"),
    [
        ([3.0, 1.0], [0.0, 1.0]),
        ([3.0, 2.0, 1.0], [0.0, 0.5, 1.0]),
        ([3.0, 3.0, 3.0], [1.0, 1.0, 1.0]),
        ([3.0, 2.0, 1.0], [1.0, 1.0, 1.0 + 1e-12]),
        ([3.0, 2.0, 1.0], [0.0, 0.9, 1.0]),
    ],
)
def test_no_knee(risk: list[float], cost: list[float]) -> None:
    """Two points, a straight line, a single point, no cost at all, a curve bent upwards."""
    assert knee(np.array(risk), np.array(cost)) is None
