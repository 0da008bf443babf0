"""The verb `calibrate`: the past in, what a plan needs to know out.

- bars make a market table, volume profiles and energy levels (`scheduler.history.from_bars`);
- trades make readings, a test of the model and a reading weight (`scheduler.history.displacement`);
- own fills with their orders make an impact law (`scheduler.history.slippage`).

What trades and fills need of a market comes from the market table given, else from the bars, else
from bars made of the trades.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scheduler.errors import InputError, MisuseError
from scheduler.history.from_bars import FEWEST_RETURNS, NOTHING, from_bars
from scheduler.history.learned import learn
from scheduler.history.taped import bars_of
from scheduler.sessions.calendar import load_calendar
from scheduler.settings import DEFAULTS, Settings
from scheduler.summary import CAUTION
from scheduler.tables import bars as bars_table
from scheduler.tables import market as market_table
from scheduler.tables.inputs import read_each
from scheduler.tables.source import Source
from scheduler.tables.write import Content, write_files

LOOKBACK = 60
"""Sessions looked back on: a quarter, as a compromise of fresh and steady (our choice)."""

_MARKET_COLUMNS = [
    "symbol",
    "price",
    "adv",
    "daily_vol",
    "currency",
    "calendar",
    "profile",
    "as_of",
]


@dataclass(frozen=True)
class Calibration:
    """What the past says.

    market : a market table; None where one was given. profiles : the profiles it names; None
    without intraday bars. readings : a readings table; None without trades. estimates : every
    estimate of a setting, its interval and diagnostics, ready for JSON. settings_file : text of a
    settings file with what the data tell from its default. summary : every figure of the bars and
    how much data it rests on, ready for JSON. notes : what the user should know.
    """

    market: pd.DataFrame | None
    profiles: pd.DataFrame | None
    readings: pd.DataFrame | None
    estimates: dict[str, Any]
    settings_file: str
    summary: dict[str, Any]
    notes: tuple[str, ...]

    def write(self, directory: str | Path) -> list[Path]:
        """Write the tables there are, settings.toml, estimates.json and summary.json; or none."""
        tables = {
            "market.csv": self.market,
            "profiles.csv": self.profiles,
            "readings.csv": self.readings,
        }
        files: dict[str, Content] = {
            **{name: table for name, table in tables.items() if table is not None},
            "settings.toml": self.settings_file,
            "estimates.json": self.estimates,
            "summary.json": self.summary,
        }
        return write_files(directory, files, instead_of=tables)


def calibrate(
    bars: Source | None = None,
    *,
    trades: Source | None = None,
    fills: Source | None = None,
    orders: Source | None = None,
    market: Source | None = None,
    profiles: Source | None = None,
    calendar: str = market_table.DEFAULT_CALENDAR,
    lookback: int = LOOKBACK,
    ignore_columns: Iterable[str] = (),
    settings: Settings = DEFAULTS,
) -> Calibration:
    """Market table, profiles, readings and estimates of settings from the past.

    Parameters
    ----------
    bars : path, `-` or DataFrame with the columns of the bars table, daily or intraday. A bar's
        time is its start: local exchange time, or converted if it has an offset.
    trades : likewise, of the trades table. Without bars and market, bars are made of them.
    fills, orders : likewise; own orders of the past, with arrival prices, and their fills.
    market, profiles : for trades and fills; in place of what bars say.
    calendar : market code of all symbols of bars, or 24/7.
    lookback : sessions looked back on.

    Raises:
        InputError: everything wrong with the tables, or every symbol that has too few bars.
        MisuseError: tables that are nothing without others.
    """
    if lookback < FEWEST_RETURNS:
        raise MisuseError(f"lookback must be at least {FEWEST_RETURNS} sessions, not {lookback}")
    given = {
        "bars": bars,
        "trades": trades,
        "fills": fills,
        "orders": orders,
        "market": market,
        "profiles": profiles,
    }
    _check_given({name for name, source in given.items() if source is not None})
    read, problems = read_each(given, ignore_columns=ignore_columns, settings=settings)
    if problems:
        raise InputError(problems)
    known = load_calendar(calendar)
    if "bars" not in read and "market" not in read:
        read["bars"] = bars_table.ensure(bars_of(read["trades"], known), settings=settings)
    found = from_bars(read["bars"], known, lookback, settings) if "bars" in read else NOTHING
    learned = learn({**found.tables, **read}, found.levels, settings)
    notes = (*(n for table in read.values() for n in table.notes), *found.notes, *learned.notes)
    inputs = {name: table.source for name, table in read.items()}
    about = {"schema": 1, "version": version("headrace"), "caution": CAUTION, "inputs": inputs}
    estimates = learned.as_dict()
    tables = {name: table.frame for name, table in found.tables.items()}
    return Calibration(
        market=tables["market"][_MARKET_COLUMNS] if "market" in tables else None,
        profiles=tables.get("profiles"),
        readings=learned.readings,
        estimates={**about, **estimates},
        settings_file=learned.settings_file,
        summary={
            **about,
            "calendar": known.code,
            "lookback": lookback,
            "total": _total(found.figures),
            "symbols": found.figures,
            "levels": estimates["levels"],
            "settings": settings.as_dict(),
            "notes": list(notes),
        },
        notes=notes,
    )


def _check_given(names: set[str]) -> None:
    if not names & {"bars", "trades", "fills"}:
        raise MisuseError("give bars, trades or fills (with their orders) to learn from")
    if ("fills" in names) != ("orders" in names):
        raise MisuseError("fills and orders belong together; give both")
    if "fills" in names and not names & {"bars", "market", "trades"}:
        raise MisuseError("fills need a market table: give market, or bars to make it of")


def _total(figures: dict[str, dict[str, Any]]) -> dict[str, Any]:
    shares = [row["overnight_share"] for row in figures.values()]
    known = [share for share in shares if share is not None]
    return {
        "symbols": len(figures),
        "overnight_share": float(np.mean(known)) if known else None,
    }
