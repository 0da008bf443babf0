"""Bars of invented symbols with a known past."""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler.sessions import load_calendar, session_hours


def session_dates(count: int, last: str, calendar: str = "XNYS") -> list:
    """The dates of the last sessions of a market up to a date."""
    dates = load_calendar(calendar).dates
    return dates[dates <= np.datetime64(last)][-count:].tolist()


def daily_bars(
    count: int = 61,
    *,
    symbol: str = "QUAY",
    last: str = "2026-02-27",
    vol: float = 0.02,
    night: float = 0.2,
    seed: int = 1,
) -> pd.DataFrame:
    """Daily bars of a random walk; `night` is the overnight share of its variance."""
    rng = np.random.default_rng(seed)
    gap = rng.normal(0.0, vol * np.sqrt(night), count)
    day = rng.normal(0.0, vol * np.sqrt(1.0 - night), count)
    close = 50.0 * np.exp(np.cumsum(gap + day))
    opened = close * np.exp(-day)
    return pd.DataFrame(
        {
            "symbol": symbol,
            "time": [date.isoformat() for date in session_dates(count, last)],
            "open": opened,
            "high": np.maximum(opened, close) * 1.002,
            "low": np.minimum(opened, close) / 1.002,
            "close": close,
            "volume": np.round(1e6 * np.exp(rng.normal(0.0, 0.3, count))),
        }
    )


def split(bars: pd.DataFrame, at: int, ratio: float) -> pd.DataFrame:
    """The same past, seen with a split before the session in row `at`, prices not adjusted."""
    result = bars.copy()
    before = result.index < at
    result.loc[before, ["open", "high", "low", "close"]] *= ratio
    result.loc[before, "volume"] /= ratio
    return result


def intraday_bars(
    count: int,
    volume: np.ndarray,
    variance: np.ndarray,
    *,
    symbol: str = "QUAY",
    calendar: str = "XNYS",
    last: str = "2026-02-27",
    step: int = 5,
    vol: float = 0.02,
    night: float = 0.2,
    auction: float = 0.0,
    auction_wait: int = 0,
    seed: int = 2,
) -> pd.DataFrame:
    """Bars of `step` minutes with given shares of volume and variance by bar, local times.

    Bars begin at the open, lunch breaks included; a session that closes early has the first ones
    only. `auction`: volume of the closing auction over that of the session before it, printed
    `auction_wait` minutes after the close.
    """
    rng = np.random.default_rng(seed)
    zone = load_calendar(calendar).timezone
    price, frames = 50.0, []
    for date in session_dates(count, last, calendar):
        opens, closes = session_hours(calendar, date)
        size = min(len(volume), int((closes - opens).total_seconds() // (60 * step)))
        price *= np.exp(rng.normal(0.0, vol * np.sqrt(night)))
        moves = vol * np.sqrt((1.0 - night) * variance[:size]) * rng.normal(size=size)
        close = price * np.exp(np.cumsum(moves))
        opened = np.append(price, close[:-1])
        price = close[-1]
        times = opens + pd.to_timedelta(step * np.arange(size), unit="min")
        shares = 1e6 * volume[:size] * np.exp(rng.normal(0.0, 0.3, size))
        if auction:
            times = times.append(pd.DatetimeIndex([closes + pd.Timedelta(auction_wait, "min")]))
            opened, close = np.append(opened, price), np.append(close, price)
            shares = np.append(shares, auction * shares.sum())
        frame = pd.DataFrame({"time": times.tz_convert(zone).tz_localize(None), "open": opened})
        frame["high"], frame["low"] = np.maximum(opened, close), np.minimum(opened, close)
        frame["close"], frame["volume"] = close, np.round(shares)
        frames.append(frame)
    bars = pd.concat(frames, ignore_index=True)
    bars.insert(0, "symbol", symbol)
    return bars


def u_shape(count: int, edge: float) -> np.ndarray:
    """Shares adding up to 1: a parabola, at both ends `edge` times what it is in the middle."""
    x = np.linspace(-1.0, 1.0, count)
    curve = 1.0 + (edge - 1.0) * x**2
    return curve / curve.sum()
