"""What `what-if` works with: a grid of points, their orders, their rows, what is kept of a run."""

from scheduler.scenarios.axes import AIMS, AXES, Grid, Value, Values, read_grid, read_vary
from scheduler.scenarios.crew import Crew, at_work
from scheduler.scenarios.gist import LISTED, digest
from scheduler.scenarios.knee import FRONTIER_COLUMNS, SOLVED, Frontier, frontiers, knee, nearest
from scheduler.scenarios.near import near_base
from scheduler.scenarios.parts import Parts, fingerprints
from scheduler.scenarios.points import Recipe
from scheduler.scenarios.study import Study
from scheduler.scenarios.table import HELD, Table
from scheduler.scenarios.working import solve_all

__all__ = [
    "AIMS",
    "AXES",
    "FRONTIER_COLUMNS",
    "HELD",
    "LISTED",
    "SOLVED",
    "Crew",
    "Frontier",
    "Grid",
    "Parts",
    "Recipe",
    "Study",
    "Table",
    "Value",
    "Values",
    "at_work",
    "digest",
    "fingerprints",
    "frontiers",
    "knee",
    "near_base",
    "nearest",
    "read_grid",
    "read_vary",
    "solve_all",
]
