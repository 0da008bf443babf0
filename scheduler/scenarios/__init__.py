"""What `what-if` works with: a grid of points, their orders, their rows, what is kept of a run."""

from scheduler.scenarios.axes import AIMS, AXES, Grid, Value, Values, read_grid, read_vary
from scheduler.scenarios.knee import SOLVED, Frontier, frontiers, knee
from scheduler.scenarios.near import near_base
from scheduler.scenarios.parts import Parts, fingerprints
from scheduler.scenarios.points import Recipe
from scheduler.scenarios.study import Study

__all__ = [
    "AIMS",
    "AXES",
    "SOLVED",
    "Frontier",
    "Grid",
    "Parts",
    "Recipe",
    "Study",
    "Value",
    "Values",
    "fingerprints",
    "frontiers",
    "knee",
    "near_base",
    "read_grid",
    "read_vary",
]
