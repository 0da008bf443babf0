"""What bars of the past say: a market table, volume profiles, energy levels.

Everything is taken from the last `lookback` sessions of each symbol:

- price: the last close.
- adv: the trimmed mean of a full session's volume (half days left out; the highest and the lowest
  5 % of the sessions too), in today's shares if a split was found. It is all trading of the past,
  one's own included.
- daily_vol: the root mean square of close-to-close log returns, the mean taken as zero. Returns
  across a missing session, a split or a bad price are left out, and said.
- profile, from intraday bars: see `scheduler.history.shape`.
- levels, in the summary: the Poisson mixture of all symbols' returns (`scheduler.history.levels`),
  if there are at least 250 of them.
- overnight_share, in the summary: the sum of squared log returns from close to open, over that sum
  and the one from open to close.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.errors import InputError, Problem
from scheduler.history.days import Days, days_of, full_sessions
from scheduler.history.jumps import Jumps, find_jumps
from scheduler.history.levels import THEORY, Levels, pooled_levels
from scheduler.history.placed import Bars, place
from scheduler.history.shape import Shape, shape_of
from scheduler.history.trimmed import trimmed_mean
from scheduler.sessions.calendar import Calendar
from scheduler.sessions.profile import clock_text
from scheduler.settings import Settings
from scheduler.tables import market as market_table
from scheduler.tables import profiles as profiles_table
from scheduler.tables.draft import Checked, some

FEWEST_RETURNS = 20
"""Returns below which no volatility is given: its standard error would be above 16 %."""
FEWEST_SESSIONS = 5
"""Full sessions of intraday bars below which no profile is given (our choice)."""

_DOUBT = 0.05  # chance below which a law counts as excluded


@dataclass(frozen=True, eq=False)
class _Past:
    """One symbol's past; full : (D,) sessions of normal hours."""

    bars: Bars
    days: Days
    jumps: Jumps
    full: NDArray[np.bool_]


@dataclass(frozen=True)
class FromBars:
    """Checked market table and profiles (None without intraday bars), levels, figures by symbol."""

    market: Checked | None = None
    profiles: Checked | None = None
    levels: Levels | None = None
    figures: dict[str, dict[str, Any]] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    @property
    def tables(self) -> dict[str, Checked]:
        """The tables there are, by name."""
        made = {"market": self.market, "profiles": self.profiles}
        return {name: table for name, table in made.items() if table is not None}


NOTHING = FromBars()


def from_bars(checked: Checked, known: Calendar, lookback: int, settings: Settings) -> FromBars:
    """What checked bars say.

    Raises:
        InputError: every symbol that has too few of them, or none that can be used.
    """
    placed, left_out = place(checked, known)
    pasts = [_past(each, lookback, known) for each in placed]
    figures = _all_figures(pasts, checked.source, known, settings)
    shapes = {past.bars.symbol: shape for past in pasts if (shape := _shape(past, known))}
    market = market_table.ensure(_market_frame(figures, shapes, known), settings=settings)
    profiles = _profiles_frame(shapes)
    levels = _levels(pasts)
    notes = (
        *left_out,
        *_half_days(pasts, known),
        *(f"{past.bars.symbol}: {text}" for past in pasts for text in _notes(past, known)),
        *market.notes,
        *([] if levels is None else [levels_text(levels)]),
    )
    checked_profiles = None if profiles is None else profiles_table.ensure(profiles)
    return FromBars(market, checked_profiles, levels, figures, notes)


def _levels(pasts: Iterable[_Past]) -> Levels | None:
    """What all symbols' returns say of the mixture."""
    used = [(past.days.returns, past.jumps.usable, past.days.session) for past in pasts]
    returns = [values[usable] for values, usable, _ in used]
    return pooled_levels(returns, [session[usable] for _, usable, session in used])


def levels_text(levels: Levels) -> str:
    """The estimate in words, with what it says of the theory and of the normal law."""
    low, high = levels.level_rate_interval
    theory = "agrees with" if levels.theory_p >= _DOUBT else "differs from"
    normal = "is excluded" if levels.normal_p < _DOUBT else "is not excluded"
    return (
        f"energy levels of {levels.returns:,} returns: rate {levels.level_rate:.2f} (95 %: "
        f"{low:.2f} to {high:.2f}) {theory} the theory's {THEORY:g} (p {levels.theory_p:.2g}); the "
        f"normal law {normal} (p {levels.normal_p:.2g})"
    )


def _past(bars: Bars, lookback: int, known: Calendar) -> _Past:
    recent = bars.last(lookback + 1)  # one close more than returns
    days = days_of(recent)
    return _Past(recent, days, find_jumps(days), full_sessions(days, known))


def _all_figures(
    pasts: Iterable[_Past], source: str, known: Calendar, settings: Settings
) -> dict[str, dict[str, Any]]:
    """Every symbol's figures; refuses all symbols that cannot have them at once."""
    problems, figures = [], {}
    for past in pasts:
        symbol = past.bars.symbol
        wrong = _lacking(past, known)
        if wrong is None:
            figures[symbol] = _figures(past, known)
            wrong = _unusable(figures[symbol], settings)
        if wrong is not None:
            problems.append(Problem(source, None, "symbol", symbol, *wrong))
    if problems:
        raise InputError(problems)
    return figures


def _figures(past: _Past, known: Calendar) -> dict[str, Any]:
    days, jumps = past.days, past.jumps
    volume = (days.volume * jumps.new_shares)[past.full]
    night = (days.gaps[jumps.usable] ** 2).sum()
    day = (np.log(days.close / days.open)[jumps.usable] ** 2).sum()
    closes = known.code != market_table.ROUND_THE_CLOCK and night + day > 0.0
    return {
        "price": float(days.close[-1]),
        "adv": float(trimmed_mean(volume)),
        "daily_vol": float(np.sqrt(np.mean(days.returns[jumps.usable] ** 2))),
        "overnight_share": float(night / (night + day)) if closes else None,
        "first": known.date_of(days.session[0]).isoformat(),
        "as_of": known.date_of(days.session[-1]).isoformat(),
        "returns": int(jumps.usable.sum()),
        "full_sessions": len(volume),
    }


def _lacking(past: _Past, known: Calendar) -> tuple[str, str] | None:
    """Rule and remedy where there is too little to go by."""
    if not len(past.days.session):
        rule = f"has no bar in a session of {known.code}"
        return rule, "give the calendar of its market, and times on that market's clock"
    returns, full = int(past.jumps.usable.sum()), int(past.full.sum())
    if returns >= FEWEST_RETURNS and full:
        return None
    last = known.date_of(past.days.session[-1])
    rule = f"has {returns} usable close-to-close returns in the sessions looked back on to {last}"
    need = f"{FEWEST_RETURNS} are needed: give bars of at least {FEWEST_RETURNS + 1} sessions in "
    return rule, need + "a row, or leave the symbol out"


def _unusable(figures: dict[str, Any], settings: Settings) -> tuple[str, str] | None:
    """Rule and remedy where a figure is none that a market table can hold."""
    most = settings.checks.max_daily_vol
    if figures["adv"] <= 0.0:
        return "trades nothing in most sessions", "give bars with volumes, or leave the symbol out"
    if figures["daily_vol"] == 0.0:
        rule = f"has the same close in all {figures['returns'] + 1} sessions: its volatility is 0"
        return rule, "give bars of prices that move, or leave the symbol out"
    if figures["daily_vol"] > most:
        rule = f"has a daily volatility of {figures['daily_vol']:.3g}, above {most:g}"
        remedy = "look for wrong prices and unadjusted splits, or raise max_daily_vol ([checks])"
        return rule, remedy
    return None


def _shape(past: _Past, known: Calendar) -> Shape | None:
    """The shape of the day, if enough intraday bars speak of it."""
    if not past.bars.step:
        return None
    chosen = _shape_sessions(past, known)
    hours = known.hours(past.days.session[-1])
    if hours.open < 0 or len(chosen) < FEWEST_SESSIONS:
        return None
    return shape_of(past.bars, chosen, hours)


def _shape_sessions(past: _Past, known: Calendar) -> NDArray[np.int64]:
    """Full sessions of today's normal hours with at least half as many bars as is usual."""
    days = past.days
    same = known.which_hours[days.session] == known.which_hours[days.session[-1]]
    complete = 2 * days.count >= np.median(days.count)
    chosen: NDArray[np.int64] = days.session[past.full & same & complete]
    return chosen


def _profile_name(symbol: str) -> str:
    return f"{symbol}-day"  # not the name of a built-in profile, whatever the symbol


def _market_frame(
    figures: dict[str, dict[str, Any]], shapes: dict[str, Shape], known: Calendar
) -> pd.DataFrame:
    rows = [
        {
            **{name: row[name] for name in ("price", "adv", "daily_vol", "as_of")},
            "symbol": symbol,
            "currency": None,
            "calendar": known.code,
            "profile": _profile_name(symbol) if symbol in shapes else None,
        }
        for symbol, row in figures.items()
    ]
    return pd.DataFrame(rows)


def _profiles_frame(shapes: dict[str, Shape]) -> pd.DataFrame | None:
    frames = [
        pd.DataFrame(
            {
                "profile": _profile_name(symbol),
                "start": [clock_text(moment) for moment in shape.start.tolist()],
                "end": [clock_text(moment) for moment in shape.end.tolist()],
                "kind": np.where(shape.auction, "auction", "continuous"),
                "volume_share": shape.volume,
                "variance_share": shape.variance,
            }
        )
        for symbol, shape in shapes.items()
    ]
    return pd.concat(frames, ignore_index=True) if frames else None


def _half_days(pasts: Iterable[_Past], known: Calendar) -> Iterator[str]:
    found = np.unique(np.concatenate([past.days.session[~past.full] for past in pasts]))
    if len(found):
        yield f"not full sessions, left out of adv and profiles: {_dates(known, found)}"


def _notes(past: _Past, known: Calendar) -> Iterator[str]:
    days, jumps = past.days, past.jumps
    for at in np.flatnonzero(jumps.split != 1.0):
        yield (
            f"{_dates(known, days.session[[at]])} opens at {np.exp(days.gaps[at]):.3g} times the "
            f"close before: taken for a split, {jumps.split[at]:.4g} new shares for one; that "
            "return is left out, and volumes before it are counted in new shares"
        )
    if jumps.bad.any():
        yield (
            f"the close of {_dates(known, days.session[jumps.bad])} is far off and taken back in "
            "the next session: taken for a bad price; the returns to and from it are left out"
        )
    if jumps.wild.any():
        sizes = ", ".join(f"{np.expm1(move):+.0%}" for move in days.returns[jumps.wild][:5])
        yield (
            f"large moves that count, since neither a split nor a bad price shows: "
            f"{_dates(known, days.session[jumps.wild])} ({sizes})"
        )
    missing = np.setdiff1d(np.arange(days.session[0], days.session[-1]), days.session)
    if len(missing):
        yield f"sessions without a bar, returns across them are left out: {_dates(known, missing)}"
    still = days.session[days.volume == 0.0]
    if len(still):
        yield f"sessions without volume, which count as they are: {_dates(known, still)}"
    if past.bars.step:
        yield from _notes_on_shape(past, known)


def _notes_on_shape(past: _Past, known: Calendar) -> Iterator[str]:
    chosen = _shape_sessions(past, known)
    if known.hours(past.days.session[-1]).open < 0:
        yield f"no profile: sessions of {known.code} open on the evening before"
    elif len(chosen) < FEWEST_SESSIONS:
        yield f"no profile: {len(chosen)} full sessions of bars, {FEWEST_SESSIONS} are needed"
    other = np.setdiff1d(past.days.session[past.full], chosen)
    if len(other):
        yield f"few bars or other hours, left out of the profile: {_dates(known, other)}"


def _dates(known: Calendar, sessions: NDArray[np.int64]) -> str:
    return some([known.date_of(session) for session in sessions.tolist()])
