"""What has to hold for any profile, any bucket length and any window."""

from __future__ import annotations

from datetime import date
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scheduler.errors import InputError
from scheduler.sessions import Grid, Profile, Row, build_grid, volume_between

DAY = date(2026, 12, 1)
NEXT = date(2026, 12, 2)
SHARE = 0.1875
HOURS = {
    "XNYS": (34_200, 57_600, None),
    "XLON": (28_800, 59_400, None),
    "XTKS": (32_400, 55_800, (41_400, 45_000)),
    "XHKG": (34_200, 57_600, (43_200, 46_800)),
}


def grid(calendar: str, profile: Profile | str, **options: Any) -> Grid:
    options = {"bucket": 15.0, "overnight_share": SHARE, **options}
    return build_grid(calendar, profile, date=DAY, **options)[0]


@st.composite
def markets(draw: st.DrawFn) -> tuple[str, Profile | str]:
    """A calendar and a profile: built in, or rows cut anywhere with any shares and auctions."""
    calendar = draw(st.sampled_from(sorted(HOURS)))
    if draw(st.booleans()):
        return calendar, draw(st.sampled_from(["flat", "u-shape"]))
    opens, closes, lunch = HOURS[calendar]
    # No row may lie inside the lunch break with volume: cut at its edges or outside it.
    outside = st.integers(opens + 1, closes - 1).filter(
        lambda t: lunch is None or not lunch[0] < t < lunch[1]
    )
    edges = sorted({opens, closes, *draw(st.lists(outside, max_size=6))})
    spans = [
        (a, b) for a, b in pairwise(edges) if lunch is None or not (lunch[0] <= a and b <= lunch[1])
    ]
    weights = st.lists(st.floats(0.01, 1.0), min_size=len(spans) + 2, max_size=len(spans) + 2)
    volume, variance = np.array(draw(weights)), np.array(draw(weights))[: len(spans)]
    volume, variance = volume / volume.sum(), variance / variance.sum()
    rows = [
        Row(a, b, False, float(v), float(h))
        for (a, b), v, h in zip(spans, volume[1:-1], variance, strict=True)
    ]
    lead, tail = draw(st.integers(0, 600)), draw(st.integers(0, 600))
    opening = Row(opens - lead, opens, True, float(volume[0]), 0.0)
    closing = Row(closes, closes + tail, True, float(volume[-1]), 0.0)
    return calendar, Profile("drawn", (opening, *rows, closing))


buckets = st.one_of(st.floats(1.0, 600.0), st.sampled_from([390 / 7, 5.0, 15.0, 510 / 13]))


def instants(day: date = DAY) -> st.SearchStrategy[pd.Timestamp]:
    """Any second of two days and the night between."""
    midnight = pd.Timestamp(day, tz="UTC")
    return st.integers(0, 40 * 3600).map(lambda s: midnight + pd.Timedelta(seconds=s))


def totals(calendar: str, profile: Profile | str, **options: Any) -> np.ndarray:
    """Volume and variance of a window, zero where nothing trades in it."""
    try:
        g = grid(calendar, profile, **options)
    except InputError:
        return np.zeros(2)
    return np.array([g.volume.sum(), g.variance.sum()])


@settings(deadline=None)
@given(markets(), buckets)
def test_a_full_session_adds_up_to_one(market: tuple[str, Profile | str], bucket: float) -> None:
    g = grid(*market, bucket=bucket)
    assert g.volume.sum() == pytest.approx(1.0, abs=1e-9)
    assert g.variance.sum() == pytest.approx(1.0 - SHARE, abs=1e-9)


@settings(deadline=None)
@given(markets(), buckets, st.lists(instants(), max_size=3), instants(), instants())
def test_stages_follow_one_another(
    market: tuple[str, Profile | str],
    bucket: float,
    cuts: list[pd.Timestamp],
    one: pd.Timestamp,
    other: pd.Timestamp,
) -> None:
    """In time order, without overlap, none negative, buckets no longer than asked for."""
    options = {"bucket": bucket, "cuts": tuple(cuts)}
    try:
        g = grid(*market, start=min(one, other), end=max(one, other), **options)
    except InputError:
        g = grid(*market, **options)
    assert np.all(g.end >= g.start)
    assert np.all(g.start[1:] >= g.end[:-1])
    assert np.all(g.volume >= 0.0)
    assert np.all(g.variance >= 0.0)
    assert np.all(np.diff(g.session) >= 0)
    assert g.session[0] == 0
    assert g.open[[0, -1]].all()
    lasts = (g.end - g.start)[g.open & ~g.auction].astype(np.int64)
    assert np.all(lasts > 0)
    assert np.all(lasts <= bucket * 60e9 + 2e6)


@settings(deadline=None)
@given(markets(), buckets, buckets, instants(), instants())
def test_totals_do_not_depend_on_the_bucket_length(
    market: tuple[str, Profile | str],
    coarse: float,
    fine: float,
    one: pd.Timestamp,
    other: pd.Timestamp,
) -> None:
    window = {"start": min(one, other), "end": max(one, other)}
    assert totals(*market, bucket=coarse, **window) == pytest.approx(
        totals(*market, bucket=fine, **window), abs=1e-9
    )


@settings(deadline=None)
@given(markets(), instants(), instants(), instants())
def test_a_window_split_while_trading_adds_up(
    market: tuple[str, Profile | str], a: pd.Timestamp, b: pd.Timestamp, c: pd.Timestamp
) -> None:
    """Split inside a bucket of continuous trading: two windows have what the whole one has."""
    start, middle, end = sorted((a, b, c))
    whole = {"start": start, "end": end}
    try:
        g = grid(*market, bucket=1000.0, **whole)
    except InputError:
        return
    at = np.datetime64(middle.tz_localize(None), "ns")
    if not np.any((g.start < at) & (at < g.end) & g.open & ~g.auction):
        return
    parts = totals(*market, start=start, end=middle) + totals(*market, start=middle, end=end)
    assert parts == pytest.approx(totals(*market, **whole), abs=1e-9)


@settings(deadline=None)
@given(markets(), instants(), instants(), instants())
def test_expected_volume_between_instants_adds_up(
    market: tuple[str, Profile | str], a: pd.Timestamp, b: pd.Timestamp, c: pd.Timestamp
) -> None:
    """Volume and nights: of two spells that meet, as of the whole."""
    start, middle, end = sorted((a, b, c))
    first, second, whole = (
        np.array(volume_between(*market, *span))
        for span in ((start, middle), (middle, end), (start, end))
    )
    assert first + second == pytest.approx(whole, abs=1e-9)


@settings(deadline=None)
@given(markets(), instants(), instants())
def test_expected_volume_is_the_grids(
    market: tuple[str, Profile | str], one: pd.Timestamp, other: pd.Timestamp
) -> None:
    """Unless an auction falls on the very end, which a grid has and a spell leaves to the next."""
    start, end = sorted((one, other))
    later = end + pd.Timedelta(nanoseconds=1)
    volume, _ = volume_between(*market, start, later)
    assert volume == pytest.approx(totals(*market, start=start, end=end)[0], abs=1e-9)


def test_expected_volume_over_a_weekend() -> None:
    """Friday's last half-hour, its closing auction, Monday's opening auction and an hour."""
    start, end = pd.Timestamp("2026-12-04T15:30-05:00"), pd.Timestamp("2026-12-07T10:30-05:00")
    volume, nights = volume_between("XNYS", "u-shape", start, end)
    assert nights == 1
    assert volume == pytest.approx(0.10 + 0.075 + 0.01 + 0.12 + 0.086)
    assert volume_between("XNYS", "u-shape", end, start) == (0.0, 0)
    assert volume_between("24/7", "flat", start, end) == (pytest.approx(67 / 24), 0)


def test_at_the_open_the_night_is_over_and_the_auction_to_come() -> None:
    start, opens = pd.Timestamp("2026-12-01T16:30-05:00"), pd.Timestamp("2026-12-02T09:30-05:00")
    assert volume_between("XNYS", "u-shape", start, opens) == (0.0, 1)
    assert volume_between("XNYS", "u-shape", start, opens - pd.Timedelta(seconds=1)) == (0.0, 0)


def test_expected_volume_beyond_the_calendar() -> None:
    now = pd.Timestamp("2026-12-01T16:30Z")
    for span in ((pd.Timestamp("1990-01-01", tz="UTC"), now), (now, now.replace(year=2090))):
        with pytest.raises(InputError, match="outside the known sessions"):
            volume_between("XNYS", "flat", *span)
