"""Tables sent by the page: bounded in bytes and cells, then checked as files of their names."""

from __future__ import annotations

import io
from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial
from pathlib import PurePath

from scheduler.console.desk import Desk, open_desk
from scheduler.errors import InputError, MisuseError, Problem
from scheduler.plan import session_day
from scheduler.settings import DEFAULTS
from scheduler.tables.cells import CellError
from scheduler.tables.inputs import gather
from scheduler.tables.settings_file import settings_of_bytes
from scheduler.tables.source import PARQUET, Source, Upload
from scheduler.tables.times import moment

TABLES = (
    "orders",
    "market",
    "profiles",
    "readings",
    "exposures",
    "factor_covariance",
    "returns",
    "corridors",
)
"""The tables that may be given, by the names of their fields."""

MOST_BYTES = 20_000_000
_MOST_CELLS = 5_000_000  # of a Parquet file, which may unfold to far more than its bytes
_LONGEST_NAME = 120
_LIMIT = (
    "give fewer rows, or start the console with the files on its command line, where there is "
    "no such limit"
)


@dataclass(frozen=True)
class Sent:
    """Files by table (and `settings`), with the session and planning time they are for."""

    files: Mapping[str, Upload]
    date: str
    at: str


def too_large(size: int) -> str:
    """What is said of files that are too large together."""
    return (
        f"the files hold {size / 1e6:,.1f} MB together, more than the {MOST_BYTES / 1e6:,.0f} MB "
        f"that the page takes; {_LIMIT}"
    )


def safe_name(given: str) -> str:
    """The name of a file without any folder, as short as a message can show."""
    return PurePath(given.replace("\\", "/")).name[-_LONGEST_NAME:] or "unnamed"


def desk_of(sent: Sent) -> Desk:
    """The desk of uploaded tables.

    Raises:
        InputError: everything wrong with them, at once, in the words of `headrace check`.
    """
    problems: list[Problem] = []
    own = sent.files.get("settings")
    rules = DEFAULTS
    if own is not None:
        rules = gather(problems, partial(settings_of_bytes, own.data, own.name)) or DEFAULTS
    at = gather(problems, partial(_moment, sent.at))
    sources: dict[str, Source | None] = {name: sent.files.get(name) for name in TABLES}
    problems += [found for file in sent.files.values() for found in _unfolded(file)]
    if problems and any(problem.rule.startswith("unfolds") for problem in problems):
        raise InputError(problems)
    day = session_day(sent.date or None)
    made = gather(
        problems,
        partial(open_desk, "your files", sources, settings=rules, date=day, at=at or None),
    )
    if problems or made is None:
        raise InputError(problems)
    return made


def _moment(text: str) -> str:
    try:
        return moment(text) if text else ""
    except CellError as error:
        raise InputError([Problem("at", None, None, text, error.rule, error.remedy)]) from None


def _unfolded(file: Upload) -> list[Problem]:
    """A problem if a Parquet file holds more cells than are read into memory here."""
    if not file.name.lower().endswith(PARQUET):
        return []
    import pyarrow as pa  # noqa: PLC0415
    from pyarrow import parquet  # noqa: PLC0415

    try:
        known = parquet.read_metadata(io.BytesIO(file.data))
    except (pa.ArrowException, OSError):
        return []  # the reader of tables says so in its own words
    cells = known.num_rows * known.num_columns
    if cells <= _MOST_CELLS:
        return []
    rule = f"unfolds to {cells:,} cells, more than the {_MOST_CELLS:,} that the page takes"
    return [Problem(file.name, None, None, None, rule, _LIMIT)]


def check_fields(names: set[str]) -> None:
    """Refuse fields that are no table.

    Raises:
        MisuseError: naming them.
    """
    strange = sorted(names - {*TABLES, "settings", "date", "at"})
    if strange:
        raise MisuseError(f"no table is called {', '.join(strange)}; there are {', '.join(TABLES)}")
