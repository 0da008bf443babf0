"""Times as text cells: read strictly, written one way, resolved elsewhere.

A moment is a time of day (`10:00:00`, belongs to the planning date), a local date-time
(`2026-01-05T10:00:00`, the exchange's clock) or one with its offset
(`2026-01-05T10:00:00-05:00`). Texts without offset sort as their times do.
"""

from __future__ import annotations

import re
from datetime import datetime

from scheduler.tables.cells import CellError

_CLOCK = re.compile(r"(\d{1,2}):(\d\d)(?::(\d\d))?")
_DATE_TIME = re.compile(r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d(:\d\d(\.\d{1,9})?)?(Z|z|[+-]\d\d(:?\d\d)?)?")
_DATE = re.compile(r"\d{4}-\d\d-\d\d")


def moment(text: str) -> str:
    """HH:MM, HH:MM:SS or an ISO 8601 date-time, in canonical text."""
    cell = text.strip()
    if _CLOCK.fullmatch(cell):
        return _clock(cell, last="23:59:59")
    if _DATE.fullmatch(cell):
        raise CellError("is a date without a time", f"add the time, as in {cell}T09:30")
    return date_time(cell)


def clock(text: str) -> str:
    """A local time of day as HH:MM:SS; 24:00:00 is the end of the day."""
    cell = text.strip()
    if not _CLOCK.fullmatch(cell):
        raise CellError("is no time of day", "write local exchange time as HH:MM")
    return _clock(cell, last="24:00:00")


def date_time(text: str) -> str:
    """An ISO 8601 date-time, or a date (its local midnight), in canonical text."""
    cell = text.strip()
    if not (_DATE_TIME.fullmatch(cell) or _DATE.fullmatch(cell)):
        raise CellError(
            "is no ISO 8601 time", "write HH:MM, 2026-01-05T10:00 or 2026-01-05T10:00-05:00"
        )
    try:
        return datetime.fromisoformat(cell.upper()).isoformat()
    except ValueError as error:
        raise CellError(
            f"is no date on the calendar ({error})", "write it as in 2026-01-05T10:00"
        ) from None


def dated(text: str) -> str:
    """An ISO 8601 date-time with its time of day, in canonical text."""
    if _DATE.fullmatch(text.strip()):
        raise CellError("is a date without a time", f"add the time, as in {text.strip()}T09:30")
    return date_time(text)


def day(text: str) -> str:
    """A date without a time of day, as 2026-01-05."""
    moment = date_time(text)
    if not moment.endswith("T00:00:00"):
        raise CellError("is a time", "write the date alone, as in 2026-01-05")
    return moment.removesuffix("T00:00:00")


def seconds(clock_text: str) -> int:
    """Seconds after local midnight of a canonical HH:MM:SS."""
    hours, minutes, secs = clock_text.split(":")
    return int(hours) * 3600 + int(minutes) * 60 + int(secs)


def is_empty_window(start: str, end: str) -> bool:
    """Whether end is not after start; False while the two are of different forms."""
    if len(start) == len(end) == len("00:00:00"):
        return end <= start
    if min(len(start), len(end)) == len("00:00:00"):
        return False
    first, last = datetime.fromisoformat(start), datetime.fromisoformat(end)
    if (first.tzinfo is None) != (last.tzinfo is None):
        return False
    return last <= first


def _clock(cell: str, last: str) -> str:
    match = _CLOCK.fullmatch(cell)
    assert match is not None
    hours, minutes, secs = (int(part or 0) for part in match.groups())
    canonical = f"{hours:02d}:{minutes:02d}:{secs:02d}"
    if minutes > 59 or secs > 59 or canonical > last:
        raise CellError("is no time of day", f"write a time from 00:00 to {last[:5]}")
    return canonical
