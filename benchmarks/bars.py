"""Calibration of many symbols' daily bars, beside pandas reading the same file as numbers."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd

from benchmarks.timing import milliseconds, table
from scheduler.calibrate import calibrate
from scheduler.sessions import load_calendar

_CASES = ((200, 500), (2_000, 500))


def run() -> None:
    rows = []
    for symbols, days in _CASES:
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / "bars.parquet"
            _bars(symbols, days).to_parquet(path, index=False)
            clock = time.perf_counter()
            frame = pd.read_parquet(path)
            plain = frame.astype({"open": float, "close": float, "volume": float})
            plain["move"] = np.log(plain["close"]).groupby(plain["symbol"]).diff()
            grouped = plain.groupby("symbol")
            _ = grouped["move"].std(), grouped["volume"].mean()
            baseline = time.perf_counter() - clock
            clock = time.perf_counter()
            result = calibrate(path, lookback=days - 1)
            seconds = time.perf_counter() - clock
        rows.append(
            (
                f"{symbols:,} x {days}",
                milliseconds(seconds),
                milliseconds(seconds / symbols),
                milliseconds(baseline),
                f"{seconds / baseline:.0f}",
                f"{result.summary['levels']['level_rate']:.2f}",
            )
        )
    header = (
        "symbols x days",
        "time",
        "a symbol",
        "pandas, unchecked",
        "ratio",
        "level rate found",
    )
    print(
        table("Calibration from daily bars, all checks and energy levels included:", header, rows)
    )


def _bars(symbols: int, days: int) -> pd.DataFrame:
    """Bars of the model with a level rate of 1/4, cells as text as in a file of a desk."""
    rng = np.random.default_rng(1)
    dates = load_calendar("XNYS").dates
    chosen = np.datetime_as_string(dates[dates <= np.datetime64("2026-02-27")][-days:], unit="D")
    levels = rng.poisson(0.25, (symbols, days))
    vol = rng.uniform(0.01, 0.03, (symbols, 1)) * np.sqrt((1.0 + 2.0 * levels) / 1.5)
    close = 50.0 * np.exp(np.cumsum(vol * rng.standard_normal((symbols, days)), axis=1)).ravel()
    volume = np.round(1e6 * np.exp(rng.normal(0.0, 0.3, symbols * days)))
    prices = {name: np.char.mod("%.6f", close) for name in ("open", "high", "low", "close")}
    names = np.repeat([f"S{i:04d}" for i in range(symbols)], days)
    return pd.DataFrame(
        {"symbol": names, "time": np.tile(chosen, symbols), **prices, "volume": volume.astype(str)}
    )
