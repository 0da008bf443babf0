"""Profiles: how a normal full session's volume and variance spread over the local clock."""

from __future__ import annotations

import math
from dataclasses import dataclass
from difflib import get_close_matches

import pandas as pd

from scheduler.errors import InputError, Problem
from scheduler.sessions.refusals import refusal

_TOLERANCE = 1e-6


@dataclass(frozen=True)
class Row:
    """One period: its shares are spread evenly over it, an auction's volume trades at its end.

    start, end : seconds after local midnight; volume, variance : shares of the session's.
    """

    start: int
    end: int
    auction: bool
    volume: float
    variance: float

    @property
    def label(self) -> str:
        return f"{clock_text(self.start)}-{clock_text(self.end)}"


@dataclass(frozen=True)
class Profile:
    """Rows in time order; volume and variance each add up to 1.

    Raises:
        InputError: with every row that breaks a rule.
    """

    name: str
    rows: tuple[Row, ...]

    def __post_init__(self) -> None:
        found = [problem for row in self.rows for problem in self._problems(row)]
        for what in ("volume", "variance"):
            total = math.fsum(getattr(row, what) for row in self.rows)
            if not abs(total - 1.0) <= _TOLERANCE:
                rule = f"add up to {total:.6g}, not to 1"
                found.append(self.problem(f"{what}_share", None, rule, "give shares of a session"))
        if found:
            raise InputError(found)

    def problem(self, column: str, value: object, rule: str, remedy: str) -> Problem:
        text = None if value is None else str(value)
        return Problem("profiles", None, column, text, f"profile {self.name!r}: {rule}", remedy)

    def _problems(self, row: Row) -> list[Problem]:
        found = []
        if row.end < row.start or (row.end == row.start and not row.auction):
            found.append(self.problem("end", row.label, "ends before it starts", "swap the two"))
        if not (row.volume >= 0.0 and row.variance >= 0.0):
            found.append(self.problem("volume_share", row.label, "negative share", "give 0 to 1"))
        if row.auction and row.variance != 0.0:
            rule = f"auction {row.label} has a variance share"
            remedy = "give it 0, and its share to the period beside it: nothing moves in an auction"
            found.append(self.problem("variance_share", row.variance, rule, remedy))
        return found


def profile_from_frame(frame: pd.DataFrame, name: str) -> Profile:
    """One profile of a table with columns profile, start, end, kind, volume_share, variance_share.

    `start` and `end` are HH:MM or HH:MM:SS on the local clock, `kind` continuous or auction.

    Raises:
        InputError: no profile of that name, or rows that break a rule.
    """
    rows = frame[frame["profile"] == name]
    if rows.empty:
        near = get_close_matches(name, [str(known) for known in frame["profile"].unique()], n=1)
        remedy = f"did you mean {near[0]!r}?" if near else "add its rows to the profiles table"
        raise refusal("profiles", "profile", name, "is no profile of the table", remedy)
    return Profile(
        name,
        tuple(
            Row(seconds(start), seconds(end), kind == "auction", float(volume), float(variance))
            for start, end, kind, volume, variance in zip(
                rows["start"],
                rows["end"],
                rows["kind"],
                rows["volume_share"],
                rows["variance_share"],
                strict=True,
            )
        ),
    )


def seconds(text: str) -> int:
    """Seconds after midnight of HH:MM or HH:MM:SS."""
    hours, minutes, secs = [*text.split(":"), "0"][:3]
    return int(hours) * 3600 + int(minutes) * 60 + int(secs)


def clock_text(moment: int) -> str:
    """HH:MM, or HH:MM:SS, of seconds after midnight; 24:00 is the end of the day."""
    hours, rest = divmod(moment if 0 <= moment <= 86_400 else moment % 86_400, 3600)
    minutes, secs = divmod(rest, 60)
    return f"{hours:02d}:{minutes:02d}" + (f":{secs:02d}" if secs else "")
