"""Writing files whole or not at all: content is made in memory, written aside, then renamed."""

from __future__ import annotations

import json
import math
import os
import secrets
import shutil
import sys
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date, time
from enum import Enum
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO, TypeAlias

import numpy as np
import pandas as pd

from scheduler.errors import MisuseError, OutputError
from scheduler.tables.cells import FORMULA_STARTS
from scheduler.tables.columns import NUMBER
from scheduler.tables.source import PARQUET

if TYPE_CHECKING:
    import pyarrow as pa


@dataclass(frozen=True)
class Blocks:
    """A table that is never whole in memory: frames of the same columns, one after the other."""

    frames: Callable[[], Iterator[pd.DataFrame]]


Content: TypeAlias = pd.DataFrame | Blocks | Mapping[str, Any] | str | bytes
"""A table, one in blocks, a summary (written as JSON), a text or a file as it is."""

_Data: TypeAlias = bytes | Callable[[BinaryIO], None]
"""The bytes of a file, or what writes them."""


def write_table(frame: pd.DataFrame, target: str | Path) -> None:
    """Write a table as CSV or Parquet by suffix; `-` is CSV on standard output.

    Raises:
        MisuseError: if the suffix is neither.
    """
    if str(target) == "-":
        if sys.stdout is None:
            raise OutputError("cannot write to standard output: it is closed")
        sys.stdout.buffer.write(_csv(frame))
        sys.stdout.buffer.flush()
        return
    write_file(target, frame)


def write_file(target: str | Path, content: Content) -> None:
    """Write one file; it appears whole or stays as it was.

    Raises:
        OutputError: if it cannot be written.
    """
    path = Path(target).resolve()
    if path.exists() and not path.is_file():
        raise MisuseError(f"{target} is no regular file; give the name of a file to write")
    data = _data_of(path.name, content)
    aside = _aside(path)
    with _reported(target):
        try:
            _write_synced(aside, data)
            aside.replace(path)
        finally:
            aside.unlink(missing_ok=True)


def write_files(
    directory: str | Path, files: Mapping[str, Content], *, instead_of: Iterable[str] = ()
) -> list[Path]:
    """Write a set of files into a directory, made if need be: all of them or none.

    Files of the same names are replaced; others in the directory are left alone, but for those
    named in `instead_of`, which would contradict the new ones and go.

    Raises:
        OutputError: if they cannot be written.
    """
    if str(directory) in ("", "-"):
        raise MisuseError(f"{str(directory)!r} is no directory; give the name of one")
    folder = Path(directory).resolve()
    if folder.exists() and not folder.is_dir():
        raise MisuseError(f"{directory} is a file; give the name of a directory")
    stale = [name for name in instead_of if name not in files]
    for name in (*files, *stale):
        if (folder / name).is_dir():
            raise MisuseError(f"{folder / name} is a directory; move it, or write elsewhere")
    data = {name: _data_of(name, content) for name, content in files.items()}
    aside = _aside(folder)
    with _reported(directory):
        folder.parent.mkdir(parents=True, exist_ok=True)
        try:
            aside.mkdir()
            for name, content in data.items():
                _write_synced(aside / name, content)
            if folder.exists():
                _swap(aside, folder, list(data))
            else:
                aside.rename(folder)
            for name in stale:
                (folder / name).unlink(missing_ok=True)
        finally:
            shutil.rmtree(aside, ignore_errors=True)
    return [folder / name for name in data]


def check_not_over(sources: Iterable[str], directory: str | Path, names: Iterable[str]) -> None:
    """Refuse to write files over a table that their content was made from.

    Raises:
        MisuseError: one of the sources would be written over.
    """
    made = {(Path(directory) / name).resolve() for name in names}
    for source in sources:
        if Path(source).resolve() in made:
            raise MisuseError(f"{source} was read for this run; write to another directory")


def encode(name: str, content: Content) -> bytes:
    """The bytes of a file that is held whole: tables by the suffix of `name`, mappings as JSON.

    Raises:
        MisuseError: if a table is to have another suffix than .csv or .parquet.
    """
    data = _data_of(name, content)
    assert isinstance(data, bytes), "blocks are written as they come, never held"
    return data


def _data_of(name: str, content: Content) -> _Data:
    """The bytes of a file, or what writes them.

    Raises:
        MisuseError: if a table is to have another suffix than .csv or .parquet.
    """
    if isinstance(content, bytes):
        return content
    if isinstance(content, str):
        return content.encode()
    if not isinstance(content, (pd.DataFrame, Blocks)):
        return to_json(content).encode()
    suffix = Path(name).suffix.lower()
    if suffix == ".csv":
        return partial(_csv_blocks, content) if isinstance(content, Blocks) else _csv(content)
    if suffix in PARQUET:
        if isinstance(content, Blocks):
            return partial(_parquet_blocks, content)
        return neutralised(content).to_parquet(index=False)
    raise MisuseError(f"cannot write a table as {name!r}; end the name in .csv or .parquet")


def to_json(data: Mapping[str, Any]) -> str:
    """JSON text of nested plain data, arrays and times; NaN and infinity become null."""
    return json.dumps(_plain(data), indent=2, allow_nan=False) + "\n"


def neutralised(frame: pd.DataFrame) -> pd.DataFrame:
    """The frame with text that a spreadsheet would run as a formula put behind an apostrophe.

    Numbers are never touched, nor are they where they stand in a text column.
    """
    safe = {_neutral(str(name)): _neutral_texts(frame[name]) for name in frame.columns}
    return pd.DataFrame(safe, index=frame.index)


def _neutral_texts(column: pd.Series[Any]) -> pd.Series[Any]:
    if not (pd.api.types.is_string_dtype(column.dtype) or column.dtype == np.dtype(object)):
        return column
    texts = column.map(lambda value: value if isinstance(value, str) else "").astype("str")
    risky = texts.str.strip(" ").str.startswith(FORMULA_STARTS) & ~texts.str.fullmatch(
        f"{NUMBER}%?"
    )
    returns = texts.str.contains("\r", regex=False)  # which a CSV writer does not always quote
    if not (risky | returns).any():
        return column
    marked = texts.where(~risky, "'" + texts).str.replace("\r", "\n", regex=False)
    return column.where(~(risky | returns), marked)


def _neutral(text: str) -> str:
    return f"'{text}" if text.strip(" ").startswith(FORMULA_STARTS) else text


def arrow(frame: pd.DataFrame) -> pa.Table:
    """The frame for Parquet; columns of texts are texts also where all are missing."""
    import pyarrow as pa  # noqa: PLC0415 - slow to load

    table = pa.Table.from_pandas(frame, preserve_index=False)
    types = (pa.types.is_null, pa.types.is_string, pa.types.is_large_string)
    fields = [
        pa.field(of.name, pa.string()) if any(is_of(of.type) for is_of in types) else of
        for of in table.schema
    ]
    return table.cast(pa.schema(fields, metadata=table.schema.metadata))


def _parquet_blocks(content: Blocks, file: BinaryIO) -> None:
    from pyarrow import parquet  # noqa: PLC0415

    writer = None
    try:
        for frame in content.frames():
            block = arrow(neutralised(frame))
            writer = writer or parquet.ParquetWriter(file, block.schema)
            writer.write_table(block)
    finally:
        if writer is not None:
            writer.close()


def _csv_blocks(content: Blocks, file: BinaryIO) -> None:
    for number, frame in enumerate(content.frames()):
        text = _csv(frame)
        file.write(text if number == 0 else text.partition(b"\n")[2])


def _csv(frame: pd.DataFrame) -> bytes:
    safe = neutralised(frame)
    for name in safe.select_dtypes(["datetime", "datetimetz"]).columns:
        texts = [None if pd.isna(moment) else moment.isoformat() for moment in safe[name]]
        safe[name] = pd.Series(texts, index=safe.index, dtype=object)
    return safe.to_csv(index=False, lineterminator="\n").encode()


def _plain(value: Any) -> Any:
    """Nested data in the types that JSON has."""
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, (np.ndarray, np.generic)):
        return _plain(value.tolist())
    if isinstance(value, (list, tuple, set, frozenset)):
        return [_plain(item) for item in value]
    if isinstance(value, Enum):
        return _plain(value.value)
    return _plain_one(value)


def _plain_one(value: Any) -> Any:
    if value is None or value is pd.NaT or value is pd.NA:
        return None
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, (bool, int, str)):
        return value
    return value.isoformat() if isinstance(value, (date, time)) else str(value)


def _aside(path: Path) -> Path:
    return path.with_name(f".{path.name}.{secrets.token_hex(4)}")


@contextmanager
def _reported(target: str | Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise OutputError(f"cannot write {target}: {error.strerror or error}") from error


def _write_synced(path: Path, data: _Data) -> None:
    with path.open("xb") as file:
        if isinstance(data, bytes):
            file.write(data)
        else:
            data(file)
        file.flush()
        os.fsync(file.fileno())


def _swap(aside: Path, folder: Path, names: list[str]) -> None:
    """Move the new files in; should one of them fail, put back the old ones."""
    old = aside / ".old"
    old.mkdir()
    begun: list[str] = []
    done = False
    try:
        for name in names:
            if (folder / name).exists():
                (folder / name).rename(old / name)
            begun.append(name)
            (aside / name).rename(folder / name)
        done = True
    finally:
        for name in begun if not done else ():
            (folder / name).unlink(missing_ok=True)
            if (old / name).exists():
                (old / name).rename(folder / name)
