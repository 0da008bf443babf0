"""Why a plan changes: each change added in turn, and the rest planned again.

The figures after each change less those before it add up, exactly, from the plan to what is planned
now. What a change explains depends on those made before it; the order is that of `replan`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import pandas as pd

from scheduler.errors import InfeasibleError, NotConvergedError
from scheduler.rest.solved import Given, Origin, Rest, solve_rest
from scheduler.rest.whole import LEVELS, as_planned, as_replanned

PLAN, NOW = "as planned", "now"


@dataclass(frozen=True)
class Change:
    """A name for what changes, and the circumstances after it."""

    name: str
    given: Given


def explained(
    origin: Origin, changes: Sequence[Change], names: list[str]
) -> tuple[Rest, pd.DataFrame]:
    """The rest after all changes, and a table of what each of them does.

    Changes after which no schedule keeps its limits are made together with the next.

    Returns the table with a row an order and change: `order_id, change, left, next_hour,
    expected_cost`; levels in the rows `as planned` and `now`, differences between them.

    Raises:
        InfeasibleError, NotConvergedError: of the last one.
    """
    before = as_planned(origin, names)
    parts = [_labelled(before, PLAN)]
    waiting: list[str] = []
    rest: Rest | None = None
    for place, change in enumerate(changes):
        waiting.append(change.name)
        try:
            rest = solve_rest(origin, change.given)
        except (InfeasibleError, NotConvergedError):
            if place == len(changes) - 1:
                raise
            continue
        after = as_replanned(origin, change.given, rest, names)
        parts.append(_labelled(after - before, " and ".join(waiting)))
        before, waiting = after, []
    assert rest is not None
    parts.append(_labelled(before, NOW))
    table = pd.concat(parts)
    order = {name: place for place, name in enumerate(names)}
    table = table.sort_values("order_id", key=lambda ids: ids.map(order), kind="stable")
    return rest, table.reset_index(drop=True)


def _labelled(levels: pd.DataFrame, change: str) -> pd.DataFrame:
    frame = levels[list(LEVELS)].reset_index(names="order_id")
    frame.insert(1, "change", change)
    return frame
