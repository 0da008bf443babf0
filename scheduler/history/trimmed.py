"""A mean that a few wild sessions cannot move."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

TRIM = 0.05
"""Share of the sessions left out at either end."""


def trimmed_mean(values: NDArray[np.float64]) -> Any:
    """Mean over the first axis without the highest and the lowest 5 % (rounded down) of it.

    values : (D,) or (D, K), D >= 1. Trimming lowers the mean of skewed values a little; shares
    made from means of like distributions are not changed by it.
    """
    cut = int(TRIM * len(values))
    return np.sort(values, axis=0)[cut : len(values) - cut].mean(axis=0)
