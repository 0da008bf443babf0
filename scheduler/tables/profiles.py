"""The profiles table: how a session's volume and variance spread over the day.

Canonical frame, rows as in the source: `profile`, `start`, `end` (HH:MM:SS, local exchange
time; 24:00:00 is the end of the day), `kind` (continuous or auction), `volume_share`,
`variance_share` (each adding up to exactly 1 over a profile).
"""

from __future__ import annotations

import math

from scheduler.tables.cells import CellError, identifier, profile_kind
from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Draft, Table, gates, some
from scheduler.tables.times import clock

BUILT_IN = ("flat", "u-shape")
SHARE_TOLERANCE = 0.005
"""Shares of a profile that add up to 1 within this are scaled to 1, further off refused."""
SILENT_TOLERANCE = 1e-9


def _own_name(text: str) -> str:
    if text in BUILT_IN:
        raise CellError("is the name of a built-in profile", "choose another name")
    return identifier(text)


TABLE = Table(
    "profiles",
    (
        Words("profile", "the name that the market table calls it by", True, parse=_own_name),
        Words("start", "local exchange time, HH:MM", required=True, parse=clock),
        Words("end", "local exchange time, HH:MM", required=True, parse=clock),
        Words("kind", "continuous or auction", default="continuous", parse=profile_kind),
        Number("volume_share", "fraction of the session's volume", required=True, low=0, high=1),
        Number("variance_share", "fraction of its variance", required=True, low=0, high=1),
    ),
)


def _check_periods(draft: Draft) -> None:
    """Periods last some time, an auction perhaps none, and follow one another."""
    frame = draft.frame
    start, end = frame["start"], frame["end"]
    known = start.notna() & end.notna()
    before, after = start.fillna(""), end.fillna("~")
    none = known & ((after < before) | ((after == before) & (frame["kind"] == "continuous")))
    draft.flag(none.to_numpy(), "end", "is not after start", "give an end later than the start")
    previous = end.groupby(frame["profile"]).shift().fillna("")
    draft.flag(
        (known & (before < previous)).to_numpy(),
        "start",
        "is before the end of the profile's row above",
        "sort the rows by start, and let no two periods overlap",
    )


def _normalise(draft: Draft) -> None:
    for column in ("volume_share", "variance_share"):
        _add_up(draft, column)


def _add_up(draft: Draft, column: str) -> None:
    """Scale a share to add up to 1 over each profile; a profile with a flawed cell is left."""
    shares, profile = draft.frame[column], draft.frame["profile"]
    total = shares.groupby(profile, sort=False).sum()
    total[shares.isna().groupby(profile, sort=False).any()] = math.nan
    off = (total - 1).abs()
    first = profile.drop_duplicates()
    row_of = dict(zip(first, first.index, strict=True))
    for name in total.index[off > SHARE_TOLERANCE]:
        rule = f"adds up to {total[name]:.6g} over profile {name!r}, not to 1"
        draft.flag_row(row_of[name], column, rule, "give shares of one whole session")
    scaled = (off > SILENT_TOLERANCE) & (off <= SHARE_TOLERANCE)
    if scaled.any():
        draft.note(f"{column} scaled to add up to 1 for {some(list(total.index[scaled]))}")
    draft.frame[column] = shares / profile.map(total)


ensure, read_profiles = gates(TABLE, _check_periods, _normalise)
