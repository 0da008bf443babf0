"""What the past says: bars by session, tapes of trades, own fills, and estimates from all."""

from scheduler.history.days import Days, days_of, full_sessions
from scheduler.history.jumps import Jumps, find_jumps
from scheduler.history.levels import Levels, pooled_levels
from scheduler.history.placed import Bars, place
from scheduler.history.shape import Shape, shape_of
from scheduler.history.trimmed import trimmed_mean

__all__ = [
    "Bars",
    "Days",
    "Jumps",
    "Levels",
    "Shape",
    "days_of",
    "find_jumps",
    "full_sessions",
    "place",
    "pooled_levels",
    "shape_of",
    "trimmed_mean",
]
