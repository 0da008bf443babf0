"""Studies that end their worker's process, in a module that workers can load."""

from __future__ import annotations

import os
import time
from typing import Any

import pandas as pd

from scheduler.scenarios import Study

DEADLY = 5
"""The point of which every worker dies."""


class Deadly(Study):
    """Whoever solves the point `DEADLY` dies, at once."""

    wait = 0.0

    def rows(self, points: Any, progress: Any = None) -> pd.DataFrame:
        if DEADLY in points:
            time.sleep(self.wait)
            os._exit(1)
        return super().rows(points, progress)


class Slow(Deadly):
    """The same a little later, when others are done."""

    wait = 1.0


class Missing(Study):
    """Its workers lack a module."""

    def rows(self, points: Any, progress: Any = None) -> pd.DataFrame:
        raise ModuleNotFoundError("No module named 'scheduler'", name="scheduler")
