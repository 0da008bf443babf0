"""Where the interior-point iteration begins: strictly inside the caps, off the volume curve."""

from __future__ import annotations

import numpy as np

from scheduler.model.ragged import Array
from scheduler.problem import Problem

FAR = 1e3  # stands for "no cap" and "no ceiling": fractions never come near it
_VOLUME_PART = 0.9
_CAP_PART = 0.9
_WARM_BLEND = 1e-2


def finite(limit: Array) -> Array:
    """Limits with infinity replaced by a bound that is never reached."""
    return np.minimum(limit, FAR)


def cold_start(problem: Problem) -> Array:
    """Fractions near the volume curve, inside the caps, adding up to 1."""
    layout, owner = problem.layout, problem.layout.owner
    volume = layout.sum(problem.theta)
    even = 1.0 / layout.size
    curve = problem.theta / np.where(volume > 0.0, volume, 1.0)[owner]
    blend = np.where(volume > 0.0, _VOLUME_PART, 0.0)[owner]
    return _fill(problem, blend * curve + (1.0 - blend) * even[owner], _CAP_PART)


def warm_start(problem: Problem, fractions: Array) -> Array:
    """An earlier schedule moved off its bounds: clipped to the caps, refilled, blended."""
    clipped = _fill(problem, fractions, 1.0 - _WARM_BLEND)
    return (1.0 - _WARM_BLEND) * clipped + _WARM_BLEND * cold_start(problem)


def _fill(problem: Problem, wanted: Array, part: float) -> Array:
    """Clip to a part of each cap, then bring each order to 1 in proportion to what is free."""
    layout, owner = problem.layout, problem.layout.owner
    cap = finite(problem.cap)
    y = np.minimum(wanted, part * cap)
    missing = 1.0 - layout.sum(y)
    room = cap - y
    lift = np.where(missing > 0.0, missing / layout.sum(room), 0.0)
    shrink = np.where(missing < 0.0, 1.0 / (1.0 - missing), 1.0)
    result: Array = (y + lift[owner] * room) * shrink[owner]
    return result
