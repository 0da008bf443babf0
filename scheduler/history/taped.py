"""Readings and findings of all tapes of a trades table."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from scheduler.errors import InputError, Problem
from scheduler.history.displacement import FEWEST, Findings, findings, intervals_of, together
from scheduler.history.tape import MOST, Imbalance, Tape, imbalance_along, place_trades
from scheduler.intake.market import market_arrays
from scheduler.model.stages import Market
from scheduler.sessions import load_calendar, local_texts
from scheduler.sessions.calendar import SECOND, Calendar
from scheduler.settings import Settings
from scheduler.tables import readings as readings_table
from scheduler.tables.draft import Checked
from scheduler.tables.market import ROUND_THE_CLOCK

_SLOT = 15 * 60 * SECOND  # of the bars made of trades


@dataclass(frozen=True)
class Taped:
    """readings : a readings table, one a relaxation volume and the last of each symbol.

    found : None of too short a tape. symbols : figures by symbol. notes : for the user.
    """

    readings: pd.DataFrame
    found: Findings | None
    symbols: dict[str, dict[str, Any]]
    notes: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        return {
            "symbols": self.symbols,
            "findings": None if self.found is None else self.found.as_dict(),
        }


def read_tapes(trades: Checked, market: pd.DataFrame, settings: Settings) -> Taped:
    """Readings of each symbol's tape and what all of them say of the model.

    market : a canonical market frame, for calendar, ADV, volatility and impact law.

    Raises:
        InputError: times that go back; a tape shorter than one relaxation volume; no tape left.
    """
    rows = market.set_index("symbol", drop=False)
    calendars = {str(name): load_calendar(code) for name, code in rows["calendar"].items()}
    tapes, notes = place_trades(trades, calendars)
    if not tapes:
        rule = "has no trade in a session of a symbol of the market table"
        remedy = "check symbols, times and calendars"
        raise InputError([Problem(trades.source, None, None, None, rule, remedy)])
    markets = [market_arrays(rows.loc[[tape.symbol]], settings) for tape in tapes]
    pairs = list(zip(tapes, markets, strict=True))
    along = [_along(tape, market, settings) for tape, market in pairs]
    _check_length(trades, pairs, along)
    parts = [
        intervals_of(tape, found, market, _open_share(tape.known, settings))
        for (tape, market), found in zip(pairs, along, strict=True)
    ]
    all_of_them = together(parts)
    exponent = float(np.mean([market.exponent[0] for market in markets]))
    found = findings(all_of_them, exponent)
    untested = () if found is not None else (_why_untested(len(all_of_them)),)
    return Taped(
        readings=_readings(tapes, along),
        found=found,
        symbols={
            tape.symbol: _figures(tape, each) for tape, each in zip(tapes, along, strict=True)
        },
        notes=(*notes, *untested),
    )


def _why_untested(count: int) -> str:
    if count < FEWEST:
        return (
            f"tapes of {count} whole relaxation volumes: from {FEWEST} on the model is "
            "tested and the reading weight estimated"
        )
    return (
        "readings or prices of the tapes do not move: the model is not tested, and no reading "
        "weight is estimated"
    )


def _along(tape: Tape, market: Market, settings: Settings) -> Imbalance:
    overnight = settings.model.overnight_relaxation if _closes(tape.known) else 0.0
    volume = float(market.relaxation_volume[0])
    return imbalance_along(tape, volume, overnight * float(market.adv[0]))


def _closes(known: Calendar) -> bool:
    return known.code != ROUND_THE_CLOCK


def _open_share(known: Calendar, settings: Settings) -> float:
    return 1.0 - settings.model.overnight_share if _closes(known) else 1.0


def _check_length(
    trades: Checked, pairs: list[tuple[Tape, Market]], along: list[Imbalance]
) -> None:
    problems = []
    for (tape, market), found in zip(pairs, along, strict=True):
        if not found.readable.any():
            volume = float(market.relaxation_volume[0])
            rule = (
                f"has at most {found.clock.max() * volume:,.0f} shares in sessions in a row, less "
                f"than the relaxation volume of {volume:,.0f}"
            )
            remedy = "give a longer tape, or leave the symbol out"
            problems.append(Problem(trades.source, None, "symbol", tape.symbol, rule, remedy))
    if problems:
        raise InputError(problems)


def _figures(tape: Tape, found: Imbalance) -> dict[str, Any]:
    return {
        "trades": len(tape),
        "sessions": len(tape.sessions.size),
        "shares": float(tape.quantity.sum()),
        "signed": tape.signed.shares(tape.quantity),
        "with_quotes": float(np.mean(~np.isnan(tape.middle))),
        "last_reading": float(found.reading[-1]) if found.readable[-1] else None,
        "largest_reading": float(np.abs(found.reading[found.readable]).max()),
    }


def _readings(tapes: list[Tape], along: list[Imbalance]) -> pd.DataFrame:
    """A readings table."""
    frames = []
    for tape, found in zip(tapes, along, strict=True):
        whole = np.floor(found.clock).astype(np.int64)
        at = np.flatnonzero((np.diff(whole, prepend=0) != 0) & found.readable)
        if found.readable[-1]:
            at = np.append(at, len(tape) - 1)
        at = at[np.append(np.diff(tape.instant[at] // 1000) > 0, True)]  # the last of a microsecond
        micro = tape.instant[at] // 1000 * 1000
        frames.append(
            pd.DataFrame(
                {
                    "symbol": tape.symbol,
                    "imbalance": np.clip(found.reading[at], -MOST, MOST),
                    "time": local_texts(micro.tolist(), tape.known.zone),
                }
            )
        )
    return readings_table.ensure(pd.concat(frames, ignore_index=True)).frame


def bars_of(trades: Checked, known: Calendar) -> pd.DataFrame:
    """A bars table of quarters of an hour, made of trades; symbols all of one calendar.

    Raises:
        InputError: times that go back; no trade in a session.
    """
    tapes, _ = place_trades(trades, dict.fromkeys(trades.frame["symbol"].unique(), known))
    if not tapes:
        rule, remedy = f"has no trade in a session of {known.code}", "check times and calendar"
        raise InputError([Problem(trades.source, None, None, None, rule, remedy)])
    return pd.concat([_bars(tape) for tape in tapes], ignore_index=True)


def _bars(tape: Tape) -> pd.DataFrame:
    opens, closes = tape.known.opens[tape.session], tape.known.closes[tape.session]
    start = np.where(tape.auction, closes, opens + (tape.instant - opens) // _SLOT * _SLOT)
    begin = np.flatnonzero(np.diff(start, prepend=-1) != 0)
    end = np.append(begin[1:], len(tape)) - 1
    return pd.DataFrame(
        {
            "symbol": tape.symbol,
            "time": local_texts(start[begin].tolist(), tape.known.zone),
            "open": tape.price[begin],
            "high": np.maximum.reduceat(tape.price, begin),
            "low": np.minimum.reduceat(tape.price, begin),
            "close": tape.price[end],
            "volume": np.add.reduceat(tape.quantity, begin),
        }
    )
