"""Where a table comes from: CSV, Parquet, standard input or a frame, all read as text cells."""

from __future__ import annotations

import csv
import io
import math
import sys
from collections.abc import Iterable
from dataclasses import dataclass, replace
from datetime import date, datetime, time
from os import PathLike
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
import pandas as pd

from scheduler.errors import InputError, MisuseError, Problem


@dataclass(frozen=True)
class Upload:
    """The bytes of a file that is not on this machine's disk, and its name."""

    name: str
    data: bytes


PARQUET = (".parquet", ".pq")
_INDEX = "__index_level_"


@dataclass(frozen=True)
class Stored:
    """An input as it was read: what it is called, its bytes, and their form: csv, parquet, json."""

    source: str
    data: bytes
    form: str = "csv"


Source: TypeAlias = "str | PathLike[str] | pd.DataFrame | Upload | Stored"


@dataclass(frozen=True)
class RawTable:
    """Text cells as they stand: `cells[name]` is a str Series, an empty cell is ''.

    `rows` are the line numbers an editor shows, the header being line 1; `problems` are those
    of the file itself (rows with too many cells, a name given twice). `file` is None of a frame.
    """

    source: str
    cells: dict[str, pd.Series[str]]
    rows: np.ndarray[Any, np.dtype[np.int64]]
    problems: tuple[Problem, ...] = ()
    file: Stored | None = None

    def stored(self) -> Stored:
        """The file's bytes; of a frame, a CSV of its cells, which reads as the same cells."""
        if self.file is not None:
            return self.file
        text = io.StringIO()
        writer = csv.writer(text, lineterminator="\n")
        writer.writerow(self.cells)
        writer.writerows(zip(*self.cells.values(), strict=True))
        return Stored(self.source, text.getvalue().encode())


def read_raw(source: Source, name: str) -> RawTable:
    """Read the cells of one table; `name` is what a frame is called in messages.

    Raises:
        InputError: if the file cannot be read as a table at all.
    """
    if isinstance(source, pd.DataFrame):
        return _from_frame(source, name)
    if isinstance(source, Stored):
        return _from_stored(source)
    if source == "-":
        return _from_stored(Stored("standard input", sys.stdin.buffer.read()))
    if not isinstance(source, (str, PathLike, Upload)):
        kind = type(source).__name__
        raise MisuseError(f"{name} must be a path, '-' or a pandas DataFrame, not {kind}")
    path = source.name if isinstance(source, Upload) else source
    suffix = Path(path).suffix.lower()
    if suffix not in (".csv", *PARQUET):
        raise _refusal(path, "is neither .csv nor .parquet", "save the table as CSV (UTF-8)")
    data = source.data if isinstance(source, Upload) else bytes_of(source)
    return _from_stored(Stored(str(path), data, "parquet" if suffix in PARQUET else "csv"))


def bytes_of(source: str | PathLike[str]) -> bytes:
    """The bytes of a file.

    Raises:
        InputError: it cannot be read.
    """
    try:
        return Path(source).read_bytes()
    except FileNotFoundError:
        raise _refusal(source, "there is no such file", "check the path") from None
    except OSError as error:
        rule = f"cannot be read ({error.strerror})"
        raise _refusal(source, rule, "check the path and its permissions") from None


def name_of(source: str | PathLike[str] | Upload | Stored) -> str:
    """What a source that is no frame is called in messages."""
    if isinstance(source, Upload):
        return source.name
    return source.source if isinstance(source, Stored) else str(source)


def cell_text(value: Any) -> str:
    """The text of a typed cell that is not missing, exact: floats by their shortest digits."""
    if isinstance(value, str):
        return value
    if isinstance(value, bytes):
        return value.decode(errors="backslashreplace")
    if isinstance(value, (bool, np.bool_)):
        return "true" if value else "false"
    if isinstance(value, (float, np.floating)):
        number = float(value)
        whole = number.is_integer() and abs(number) < 2**53
        return str(int(number)) if whole else repr(number)
    if isinstance(value, (datetime, date, time)):
        return value.isoformat()
    return str(value)


def _refusal(source: object, rule: str, remedy: str, row: int | None = None) -> InputError:
    return InputError([Problem(str(source), row, None, None, rule, remedy)])


def _from_stored(file: Stored) -> RawTable:
    read = _from_parquet if file.form == "parquet" else _from_csv
    return replace(read(file.data, file.source), file=file)


def _from_frame(frame: pd.DataFrame, name: str) -> RawTable:
    columns = [frame.iloc[:, position] for position in range(frame.shape[1])]
    texts = [_typed(c.astype(object).where(c.notna(), None).tolist()) for c in columns]
    return _assemble(name, [str(label) for label in frame.columns], texts, _lines(len(frame)))


def _from_parquet(data: bytes, source: str) -> RawTable:
    import pyarrow as pa  # noqa: PLC0415
    from pyarrow import parquet  # noqa: PLC0415

    try:
        table = parquet.read_table(io.BytesIO(data))
    except (pa.ArrowException, OSError):
        remedy = "write the file again, or save the table as CSV"
        raise _refusal(source, "is no readable Parquet file", remedy) from None
    names = [name for name in table.column_names if not name.startswith(_INDEX)]
    texts = [_typed(table.column(name).to_pylist()) for name in names]
    return _assemble(source, names, texts, _lines(table.num_rows))


def _typed(values: list[Any]) -> list[str]:
    return ["" if _is_missing(value) else cell_text(value) for value in values]


def _is_missing(value: Any) -> bool:
    return value is None or (isinstance(value, float) and math.isnan(value))


def _lines(count: int) -> np.ndarray[Any, np.dtype[np.int64]]:
    return np.arange(2, count + 2, dtype=np.int64)


def _from_csv(data: bytes, source: str) -> RawTable:
    header, records, lines = _records(_decoded(data, source), source)
    width = len(header)
    ragged = [at for at, record in enumerate(records) if len(record) != width]
    problems = [
        Problem(
            source,
            lines[at],
            None,
            ",".join(records[at])[:80],
            f"has {len(records[at])} cells where the header has {width}",
            "put text that holds a comma in quotes; write numbers without thousands separator "
            "and with a decimal point",
        )
        for at in ragged
    ]
    if ragged:
        even = [at for at, record in enumerate(records) if len(record) == width]
        records, lines = [records[at] for at in even], [lines[at] for at in even]
    texts: Iterable[Iterable[str]] = zip(*records, strict=True) if records else ([] for _ in header)
    return _assemble(source, header, texts, np.array(lines, dtype=np.int64), problems)


def _decoded(data: bytes, source: str) -> str:
    try:
        text = data.decode("utf-8-sig")
        bad = text.encode().find(b"\0") if "\0" in text else -1
    except UnicodeDecodeError as error:
        text, bad = "", error.start
    if bad >= 0:
        line = data.count(b"\n", 0, bad) + 1
        raise _refusal(source, "is not UTF-8 text", "save it as CSV in UTF-8", line)
    return text


def _records(text: str, source: str) -> tuple[list[str], list[list[str]], list[int]]:
    """Header, records and the line on which each record begins; blank lines are passed over."""
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    records, lines, begin = [], [], 1
    try:
        for record in reader:
            if record:
                records.append(record)
                lines.append(begin)
            begin = reader.line_num + 1
    except csv.Error as error:
        remedy = "close every quote, and double a quote inside quoted text"
        raise _refusal(source, f"is no well-formed CSV ({error})", remedy, begin) from None
    if not records:
        raise _refusal(source, "is empty", "give a header row and at least one row below it")
    header = [name.strip() for name in records[0]]
    for mark, called in ((";", "semicolons"), ("\t", "tabs"), ("|", "bars")):
        if len(header) == 1 and mark in header[0]:
            remedy = "save it with commas between cells and a decimal point in numbers"
            raise _refusal(source, f"separates its cells by {called}", remedy, lines[0])
    return header, records[1:], lines[1:]


def _assemble(
    source: str,
    names: list[str],
    texts: Iterable[Iterable[str]],
    rows: np.ndarray[Any, np.dtype[np.int64]],
    problems: Iterable[Problem] = (),
) -> RawTable:
    found, cells = list(problems), {}
    for place, (name, column) in enumerate(zip(names, texts, strict=True), start=1):
        if name in cells:
            rule, remedy = "names a column that is there already", "keep one of the two"
            found.append(Problem(source, 1, name, None, rule, remedy))
        elif not name:
            rule, remedy = f"column {place} has no name", "name it in the header or remove it"
            found.append(Problem(source, 1, None, None, rule, remedy))
        else:
            cells[name] = pd.Series(list(column), dtype="str")
    if not len(rows) and not found:
        remedy = "add a row below the header, or leave the table out"
        found.append(Problem(source, None, None, None, "has no rows", remedy))
    return RawTable(source, cells, rows, tuple(found))
