"""The market table: one row per symbol, what it costs and how it moves.

Canonical frame: `symbol`, `price` (currency/share), `adv` (shares/session, the others'),
`daily_vol` (fraction/√day), `currency` (None: the base currency), `fx` (base per unit of
currency; NaN: see `tables.cross`), `calendar` (market code or 24/7; XNYS if empty, with a
note), `spread_bps`, `buy_fee_bps`, `sell_fee_bps`, `fee_per_share` (0), `lot_size` (1),
`tick_size` (NaN: none), `profile`, `group` (None), `shares_outstanding` (NaN), `relaxation`,
`impact_coefficient`, `impact_exponent` (NaN: the settings'), `as_of` (ISO date; None: not known).
"""

from __future__ import annotations

from dataclasses import fields

import numpy as np

from scheduler.settings import ModelSettings
from scheduler.tables.cells import calendar, currency
from scheduler.tables.columns import Column, Number, Words, like_setting
from scheduler.tables.draft import Draft, Table, gates, some
from scheduler.tables.orders import MOST_SHARES
from scheduler.tables.times import day

DEFAULT_CALENDAR = "XNYS"
ROUND_THE_CLOCK = "24/7"

_MODEL = {item.name: item for item in fields(ModelSettings)}


def _columns() -> tuple[Column, ...]:
    return (
        Words("symbol", "once per symbol", required=True),
        Number("price", "currency per share", required=True, low=0, above=True, high=1e12),
        Number(
            "adv",
            "shares per session that everyone else trades",
            required=True,
            low=0,
            above=True,
            high=MOST_SHARES,
        ),
        Number(
            "daily_vol",
            "close-to-close volatility, fraction per square root of a day, as in 0.02",
            required=True,
            low=1e-6,
        ),
        Words("currency", "ISO 4217 code", empty="the base currency", parse=currency),
        Number(
            "fx",
            "base currency per unit of currency",
            empty="1, in the base currency only",
            low=0,
            above=True,
            high=1e12,
        ),
        Words(
            "calendar",
            "ISO 10383 market code, or 24/7",
            default=DEFAULT_CALENDAR,
            parse=calendar,
        ),
        Number("spread_bps", "full quoted spread, basis points", default=0.0, low=0, high=1e4),
        Number("buy_fee_bps", "basis points of what is bought", default=0.0, low=-1e3, high=1e4),
        Number("sell_fee_bps", "basis points of what is sold", default=0.0, low=-1e3, high=1e4),
        Number("fee_per_share", "currency per share", default=0.0, low=-1e6, high=1e6),
        Number("lot_size", "shares", default=1.0, low=0, above=True, high=MOST_SHARES),
        Number("tick_size", "currency per share", empty="none", low=0, above=True),
        Words(
            "profile",
            "name of a volume profile, built in or of the profiles table",
            empty="the built-in one",
        ),
        Words("group", "a name that limits can speak of", empty="none"),
        Number("shares_outstanding", "shares", empty="not known", low=0, above=True),
        like_setting(_MODEL["relaxation"], "sessions of volume"),
        like_setting(_MODEL["impact_coefficient"], "k, on ground-state volatility"),
        like_setting(_MODEL["impact_exponent"], "delta"),
        Words("as_of", "date of the latest observation", empty="not known", parse=day),
    )


TABLE = Table("market", _columns(), unique=("symbol",))


def _check_volatility(draft: Draft) -> None:
    volatility = draft.frame["daily_vol"]
    checks = draft.settings.checks
    most, unusual = checks.max_daily_vol, checks.warn_daily_vol
    draft.flag(
        (volatility > most).to_numpy(),
        "daily_vol",
        f"must be at most {most:g} per square root of a day",
        "is it a percent or an annual figure? 2 % a day is 0.02; an annual one is divided by "
        "the square root of 252",
    )
    high = (volatility > unusual) & (volatility <= most)
    if high.any():
        names = draft.frame.loc[high, "symbol"].tolist()
        draft.note(f"daily_vol above {unusual:g} per square root of a day for {some(names)}")


def _check_lots(draft: Draft) -> None:
    lots, clock = draft.frame["lot_size"], draft.frame["calendar"]
    part = (lots % 1 > 0) & (clock != ROUND_THE_CLOCK) & clock.notna()
    draft.flag(
        part.to_numpy(),
        "lot_size",
        "is a fraction of a share",
        f"give whole shares; fractions trade only on calendar {ROUND_THE_CLOCK}",
    )


def _note_calendar(draft: Draft) -> None:
    cells = draft.raw.cells.get("calendar")
    empty = np.ones(len(draft.frame), np.bool_) if cells is None else (cells == "").to_numpy()
    if empty.any():
        names = draft.frame.loc[empty, "symbol"].tolist()
        draft.note(f"calendar not given, {DEFAULT_CALENDAR} assumed, for {some(names)}")


ensure, read_market = gates(TABLE, _check_volatility, _check_lots, _note_calendar)
