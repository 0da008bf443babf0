"""The table of scenarios: held in memory, or read from its parts on disk block by block.

Rows are in order of the points, and in the base's order within a point; a row's label is its place,
point times orders plus order.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

HELD = 500_000
"""Rows, of about 300 bytes, beyond which a table is not held in memory."""

_BLOCK = 200_000  # rows read at once of a table on disk


@dataclass(frozen=True)
class Table:
    """All rows of P points (the base's too) and N orders.

    orders : (N,) their ids. held : the rows, if they are in memory. kept : files that hold them
    otherwise, each with whole points. knees : (P N,) which rows are knees; None: not known yet.
    """

    orders: tuple[str, ...]
    points: int
    held: pd.DataFrame | None = None
    kept: tuple[Path, ...] = ()
    knees: NDArray[np.bool_] | None = None

    def __len__(self) -> int:
        return self.points * len(self.orders)

    def with_knees(self, places: Sequence[int]) -> Table:
        """With a last column that marks these rows."""
        knees = np.zeros(len(self), dtype=np.bool_)
        knees[list(places)] = True
        held = None if self.held is None else self.held.assign(knee=knees)
        return replace(self, held=held, knees=knees)

    def by_points(self, columns: Sequence[str] | None = None) -> Iterator[pd.DataFrame]:
        """All rows in blocks of whole points; of all columns, or of some."""
        yield from self._blocks("point", range(self.points), len(self.orders), columns)

    def by_orders(self, columns: Sequence[str] | None = None) -> Iterator[pd.DataFrame]:
        """All rows in blocks of whole orders; of all columns, or of some."""
        yield from self._blocks("order_id", self.orders, self.points, columns)

    def at(self, name: str, value: Any) -> pd.DataFrame:
        """The rows of one point or one order: name is `point` or `order_id`."""
        if self.held is not None:
            found: pd.DataFrame = self.held[self.held[name] == value]
            return found
        return self._read(name, [value], None)

    def whole(self) -> pd.DataFrame:
        """All rows at once."""
        return self.held if self.held is not None else pd.concat(list(self.by_points()))

    def _blocks(
        self, name: str, values: Sequence[Any], rows: int, columns: Sequence[str] | None
    ) -> Iterator[pd.DataFrame]:
        """Rows by the values of a column, of which each has so many."""
        if self.held is not None:
            yield self.held if columns is None else self.held[list(columns)]
            return
        each = max(1, _BLOCK // rows)
        for first in range(0, len(values), each):
            yield self._read(name, values[first : first + each], columns)

    def _read(
        self, name: str, values: Sequence[Any], columns: Sequence[str] | None
    ) -> pd.DataFrame:
        from pyarrow import dataset  # noqa: PLC0415 - slow to load

        wanted = dataset.field(name)
        chosen = wanted.isin(list(values))
        if isinstance(values, range):  # which lets parts outside be passed over
            chosen = (wanted >= values[0]) & (wanted <= values[-1])
        labels = [] if columns is None else [n for n in ("point", "order_id") if n not in columns]
        read = None if columns is None else [*columns, *labels]
        found: pd.DataFrame = self._files.to_table(columns=read, filter=chosen).to_pandas()
        order = pd.Index(self.orders).get_indexer(pd.Index(found["order_id"]))
        found.index = pd.Index(found["point"].to_numpy() * len(self.orders) + order)
        found = found.sort_index().drop(columns=labels)
        if self.knees is not None and columns is None:
            found["knee"] = self.knees[found.index]
        return found

    @cached_property
    def _files(self) -> Any:
        from pyarrow import dataset  # noqa: PLC0415

        return dataset.dataset([str(path) for path in self.kept], format="parquet")
