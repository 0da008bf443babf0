"""Working a grid off, chunk by chunk, here or by workers, into its table."""

from __future__ import annotations

from collections.abc import Generator, Sequence
from contextlib import closing
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from scheduler.scenarios.fanout import fan_out
from scheduler.scenarios.parts import Parts
from scheduler.scenarios.study import Study
from scheduler.scenarios.table import HELD, Table
from scheduler.solve.schedule import Progress


def solve_all(study: Study, parts: Parts | None, client: Any, progress: Progress | None) -> Table:
    """The table of every chunk, those kept from an earlier run unsolved.

    client : a Dask client whose workers solve; None: they are solved here.
    """
    numbers, orders = range(len(study.chunks)), tuple(study.base.names)
    table = Table(orders, len(study.grid) + 1)
    missing = [n for n in numbers if parts is None or not parts.finished(n)]
    told = _Told(progress, len(table))
    told.add(len(table) - len(orders) * sum(len(study.chunks[n]) for n in missing))
    found = []
    with closing(_each(study, missing, client, told)) as solved:
        for number, rows in solved:
            if parts is None:
                found.append(rows)
            else:
                parts.write(number, rows)
            told.add(len(rows))
    if parts is not None:
        table = replace(table, kept=tuple(parts.path(number) for number in numbers))
    held = found if parts is None else table.by_points()
    if len(table) <= HELD:
        frame = pd.concat(list(held), ignore_index=True)
        table = replace(table, held=frame.sort_values("point", kind="stable", ignore_index=True))
    return table


def _each(
    study: Study, numbers: Sequence[int], client: Any, told: _Told
) -> Generator[tuple[int, pd.DataFrame]]:
    """The rows of chunks by their number."""
    if client is not None:
        yield from fan_out(study, numbers, client)
        return
    for number in numbers:
        yield number, study.rows(study.chunks[number], told.within)


@dataclass
class _Told:
    """What is told of a run's progress, in rows."""

    progress: Progress | None
    total: int
    done: int = 0

    def within(self, rows: int, _all: int) -> None:
        """So many rows of what is being solved."""
        if self.progress is not None:
            self.progress(self.done + rows, self.total)

    def add(self, rows: int) -> None:
        """So many more rows for good."""
        self.done += rows
        self.within(0, 0)
