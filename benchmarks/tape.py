"""Trades signed and read as imbalance, beside the same arithmetic trade by trade; CPU times."""

from __future__ import annotations

import math
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd

from benchmarks.timing import milliseconds, table
from scheduler.calibrate import calibrate
from scheduler.history.tape import Tape, imbalance_along
from scheduler.model.ragged import Array
from scheduler.sessions import load_calendar

_SESSIONS, _BY_LOOP = 25, 100_000
_ADV, _RELAXATION = 8_000_000.0, 0.05


def run() -> None:
    rows = []
    for count in (100_000, 1_000_000):
        tape = _tape(count)
        clock = time.process_time()
        reading = imbalance_along(tape, _RELAXATION * _ADV).reading
        ours = time.process_time() - clock
        few = min(count, _BY_LOOP)
        clock = time.process_time()
        plain = _by_loop(tape, few)
        loop = (time.process_time() - clock) * count / few
        checked, unchecked = _whole_run(tape)
        rows.append(
            (
                f"{count:,}",
                milliseconds(ours),
                milliseconds(loop),
                f"{loop / ours:.0f}",
                f"{np.abs(plain - reading[:few]).max():.0e}",
                milliseconds(checked),
                milliseconds(unchecked),
                f"{checked / unchecked:.0f}",
            )
        )
    header = (
        "trades",
        "signs and readings",
        "by a loop",
        "ratio",
        "largest difference",
        "calibrate, from the file",
        "pandas, unchecked",
        "ratio",
    )
    print(table(f"A tape of {_SESSIONS} sessions, CPU times:", header, rows))


def _tape(count: int) -> Tape:
    """Trades at random, half of them with quotes."""
    rng, known = np.random.default_rng(1), load_calendar("XNYS")
    first = known.session_of(np.datetime64("2026-01-05").item())
    session = np.repeat(np.arange(first, first + _SESSIONS), count // _SESSIONS)
    at = np.sort(rng.random((_SESSIONS, count // _SESSIONS)), axis=1).ravel()
    length = known.closes[session] - known.opens[session]
    middle = 50.0 + 0.01 * np.cumsum(rng.integers(-1, 2, len(session)) * 0.1)
    return Tape(
        symbol="QUAY",
        known=known,
        session=session,
        instant=known.opens[session] + (at * length).astype(np.int64),
        price=np.round(middle + 0.01 * rng.choice([-1.0, 0.0, 1.0], len(session)), 2),
        quantity=rng.integers(1, int(2 * _ADV * _SESSIONS / count), len(session)).astype(float),
        middle=np.where(rng.random(len(session)) < 0.5, middle, np.nan),
        auction=np.zeros(len(session), np.bool_),
    )


def _by_loop(tape: Tape, count: int) -> Array:
    """Readings trade by trade: quote rule, tick rule, both states, in plain Python."""
    length, result = _RELAXATION * _ADV, np.empty(count)
    net = total = 0.0
    last, tick, day = math.nan, 0, -1
    columns = (tape.session, tape.price, tape.middle, tape.quantity)
    rows = zip(*(column[:count].tolist() for column in columns), strict=True)
    for i, (session, price, middle, quantity) in enumerate(rows):
        if session != day:
            day, tick = session, 0
        elif price != last:
            tick = 1 if price > last else -1
        last, sign = price, tick
        if abs(price - middle) > 1e-12 * price:
            sign = 1 if price > middle else -1
        fade = math.exp(-quantity / length)
        net = net * fade + (1.0 - fade) * sign
        total = total * fade + 1.0 - fade
        result[i] = net / max(total - abs(net), abs(net) / 5.0, 1e-300)
    return result


def _whole_run(tape: Tape) -> tuple[float, float]:
    """Seconds of `calibrate` on a file, and of pandas reading it as numbers."""
    quotes = {"bid": tape.middle - 0.01, "ask": tape.middle + 0.01}
    moments = pd.to_datetime(tape.instant, unit="ns", utc=True).tz_convert(tape.known.zone)
    frame = pd.DataFrame(
        {"symbol": tape.symbol, "time": moments.strftime("%Y-%m-%dT%H:%M:%S.%f%z")}
    )
    numbers = {"price": tape.price, "quantity": tape.quantity, **quotes}
    frame = frame.assign(**{name: np.round(values, 6) for name, values in numbers.items()})
    market = pd.DataFrame(
        {"symbol": ["QUAY"], "price": [50.0], "adv": [_ADV], "daily_vol": [0.02]}
    ).assign(calendar="XNYS", relaxation=_RELAXATION)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "trades.csv"
        frame.to_csv(path, index=False)
        clock = time.process_time()
        pd.to_datetime(pd.read_csv(path)["time"], utc=True, format="ISO8601")
        plain = time.process_time() - clock
        clock = time.process_time()
        calibrate(trades=path, market=market)
        return time.process_time() - clock, plain
