"""Chunks of a grid worked off by several processes, on this machine or on a Dask cluster.

Rows come back to this process, which alone keeps them: workers need not share a disk. A few chunks
a worker are under way at any time, so that neither side's memory grows with the grid. The study
is a task of its own on which the others depend: it travels once, and is made again if all who had
it are lost. A chunk whose worker dies goes to another one.
"""

from __future__ import annotations

import pickle
import time
import uuid
import warnings
from collections.abc import Generator, Iterable, Iterator
from concurrent.futures import CancelledError
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import islice
from typing import Any

import pandas as pd

from scheduler.errors import LostWorkersError, MisuseError
from scheduler.model.ragged import Index
from scheduler.scenarios.crew import renew
from scheduler.scenarios.study import Study

_AHEAD = 2  # chunks under way for each thread of the workers: one solved, one at hand
_GONE = 60.0  # seconds without any worker until a run is given up
_LOOK = 5.0  # seconds between two looks at whether there are any
_NAMED = 20  # points named in an error


def fan_out(
    study: Study, numbers: Iterable[int], client: Any
) -> Generator[tuple[int, pd.DataFrame]]:
    """The rows of chunks by their number, in the order in which they are finished.

    client : a Dask client; see `crew.at_work`.

    Raises:
        LostWorkersError: chunks whose workers died every time, once all others are done; or no
            workers are left. MisuseError: a worker that cannot load this program.
    """
    shift = _Shift(client, study)
    suspects: list[int] = []
    guilty: list[int] = []
    with _gone_told():
        yield from shift.solve(numbers, suspects)
        for number in suspects:  # each alone, as it may only have been near one that kills
            yield from shift.solve([number], guilty)
    if guilty:
        raise LostWorkersError(_blame(study, guilty))


@dataclass(frozen=True)
class _Shift:
    """A study on its way through the workers of a client."""

    client: Any
    study: Study

    @cached_property
    def run(self) -> str:
        return uuid.uuid4().hex

    @cached_property
    def shipped(self) -> Any:
        """The study at the workers, with its base solved, without its lists of points."""
        light = replace(self.study)
        vars(light).update(base=self.study.base, base_shares=self.study.base_shares)
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", "Sending large graph", UserWarning)
            return self.client.submit(
                pickle.loads, pickle.dumps(light), key=f"headrace-study-{self.run}"
            )

    def solve(self, numbers: Iterable[int], lost: list[int]) -> Iterator[tuple[int, pd.DataFrame]]:
        """The rows of some chunks; those whose workers died every time are told in `lost`."""
        from distributed import KilledWorker  # noqa: PLC0415

        waiting = iter(numbers)
        under_way: dict[Any, int] = {}
        while True:
            room = _AHEAD * max(1, sum(self.client.nthreads().values())) - len(under_way)
            for number in islice(waiting, max(0, room)):
                under_way[self._submit(number)] = number
            if not under_way:
                return
            for future in self._finished(list(under_way)):
                number = under_way.pop(future)
                error = future.exception()
                if error is None:
                    yield number, future.result()
                elif isinstance(error, KilledWorker):
                    lost.append(number)
                elif isinstance(error, ImportError):
                    raise MisuseError(f"a worker cannot load this program: {error}") from error
                else:
                    raise error

    def _submit(self, number: int) -> Any:
        key = f"headrace-rows-{self.run}-{number}-{uuid.uuid4().hex[:8]}"
        points = self.study.chunks[number]
        return self.client.submit(_rows, self.shipped, points, key=key)

    def _finished(self, futures: list[Any]) -> list[Any]:
        """Some that are finished, as soon as there are any.

        Raises:
            LostWorkersError: there have been no workers for long.
        """
        from distributed import wait  # noqa: PLC0415

        seen, renewed = time.monotonic(), False
        while True:
            try:
                return list(wait(futures, timeout=_LOOK, return_when="FIRST_COMPLETED").done)
            except TimeoutError:
                if self.client.nthreads():
                    seen, renewed = time.monotonic(), False
                elif not renewed:
                    renew(self.client)
                    renewed = True
                elif time.monotonic() - seen > _GONE:
                    raise LostWorkersError(
                        f"there has been no worker for {_GONE:.0f} seconds; {_GO_ON}"
                    ) from None


@contextmanager
def _gone_told() -> Iterator[None]:
    """Losing the scheduler in the words of this program."""
    try:
        yield
    except (CancelledError, OSError) as error:
        reason = str(error).partition("\n")[0].rstrip(":. ")
        raise LostWorkersError(f"the cluster is gone ({reason}); {_GO_ON}") from error


_GO_ON = "with --out the parts finished so far are kept, and the same command goes on from there"


def _rows(study: Study, points: Index) -> pd.DataFrame:
    """What a worker does."""
    return study.rows(points)


def _blame(study: Study, numbers: list[int]) -> str:
    """Which points those chunks hold."""
    points = sorted(point for number in numbers for point in study.chunks[number].tolist())
    names = ", ".join(map(str, points[:_NAMED])) + (" ..." if len(points) > _NAMED else "")
    return (
        f"every worker died that was given points {names} ({len(points):,} points); all others "
        f"are finished: {_GO_ON}. Without --workers and --cluster these points are solved here, "
        "which may show why; workers that run out of memory die, too"
    )
