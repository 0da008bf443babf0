"""The six charts by name, in the order of the page."""

from __future__ import annotations

from scheduler.report.law_charts import DISTRIBUTION, FRONTIER
from scheduler.report.time_charts import COST, IMBALANCE, REMAINING, SLICES

CHARTS = {
    "slices": SLICES,
    "remaining": REMAINING,
    "cost": COST,
    "imbalance": IMBALANCE,
    "distribution": DISTRIBUTION,
    "frontier": FRONTIER,
}
