"""The built-in profiles, made to measure for a market's normal hours.

`flat`: volume and variance even over the open time, no auctions.

`u-shape`: the open time in 13 equal parts (half-hours of a day of 6.5 hours), each with its share
of the day. The shape is from the literature: half-hour volume is high at the open, low at
midday and rises to the close (Heston, Korajczyk & Sadka 2010, J. Finance 65(4)); volatility falls
from the open to the early afternoon, then rises a little (Lockwood & Linn 1990, J. Finance
45(2)); the closing auction takes 7.5 % (US, 2018: Bogousslavsky & Muravyev 2023, J. Financial
Markets 66). The numbers of the table, and 1 % for the opening auction, are our own choice.

A lunch break carries, per minute, 1/13 of the variance of an average open minute (French & Roll
1986, J. Financial Economics 17: 13 is the least of their ratios, closed against open, per hour).
"""

from __future__ import annotations

from functools import lru_cache
from itertools import pairwise

from scheduler.sessions.calendar import DAY, Hours, load_calendar
from scheduler.sessions.profile import Profile, Row
from scheduler.sessions.refusals import refusal

BUILT_IN = ("flat", "u-shape")

OPENING_AUCTION = 0.01
CLOSING_AUCTION = 0.075
CLOSED_RATE = 1.0 / 13.0
"""Variance per closed minute over variance per open minute."""

# Continuous volume, 91.5 in all, and variance, 100, in percent of the day.
_VOLUME = (12.0, 8.6, 7.3, 6.6, 6.1, 5.7, 5.4, 5.2, 5.4, 5.7, 6.3, 7.2, 10.0)
_VARIANCE = (18.0, 11.5, 9.0, 7.7, 6.8, 6.2, 5.7, 5.4, 5.3, 5.5, 5.8, 6.2, 6.9)


def default_profile(calendar: str) -> str:
    """The built-in profile of a market that names none: `flat` only where nothing ever closes."""
    hours = load_calendar(calendar).hours(-1)
    return "flat" if _round_the_clock(hours) else "u-shape"


@lru_cache(maxsize=256)
def built_in(name: str, hours: Hours) -> Profile:
    """A built-in profile for the given normal hours.

    Raises:
        InputError: no such profile, or a u-shape where nothing opens or closes.
    """
    if name == "flat":
        return Profile(name, _even_parts(hours, (1.0,), (1.0,)))
    if name != "u-shape":
        known = ", ".join(BUILT_IN)
        raise refusal("market", "profile", name, "is no built-in profile", f"known: {known}")
    if _round_the_clock(hours):
        raise refusal(
            "market",
            "profile",
            name,
            "needs a market with an open and a close; this one trades round the clock",
            "use 'flat', or a profile of your own",
        )
    volume = tuple(share / 100.0 for share in _VOLUME)
    variance = tuple(share / 100.0 for share in _VARIANCE)
    return Profile(
        name,
        (
            Row(hours.open, hours.open, True, OPENING_AUCTION, 0.0),
            *_even_parts(hours, volume, variance),
            Row(hours.close, hours.close, True, CLOSING_AUCTION, 0.0),
        ),
    )


def _round_the_clock(hours: Hours) -> bool:
    return hours.close - hours.open >= DAY


def _even_parts(
    hours: Hours, volume: tuple[float, ...], variance: tuple[float, ...]
) -> tuple[Row, ...]:
    """Rows over equal parts of the open time; a part that lunch interrupts becomes two."""
    start, end = hours.lunch or (hours.close, hours.close)
    morning, lunch = start - hours.open, end - start
    total = hours.close - hours.open - lunch
    closed = lunch * CLOSED_RATE / (total + lunch * CLOSED_RATE)
    rows = [Row(start, end, False, 0.0, closed)] if lunch else []
    for part, (v, h) in enumerate(zip(volume, variance, strict=True)):
        edges = [total * part // len(volume), total * (part + 1) // len(volume)]
        if edges[0] < morning < edges[1]:
            edges.insert(1, morning)
        length = edges[-1] - edges[0]
        for a, b in pairwise(edges):
            shift = hours.open + (lunch if a >= morning else 0)
            share = (b - a) / length
            rows.append(Row(a + shift, b + shift, False, v * share, h * share * (1.0 - closed)))
    return tuple(sorted(rows, key=lambda row: row.start))
