"""Tapes of an invented symbol, played by the model with known numbers."""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler.history.tape import Tape, imbalance_along
from scheduler.intake.market import market_arrays
from scheduler.model.impact import displacement
from scheduler.model.stages import Market
from scheduler.sessions import load_calendar
from scheduler.settings import Settings
from scheduler.tables import market as market_table

PIECES = 64
"""Trades in a relaxation volume: a power of two, so that the clock is exact."""
SPREAD = 0.02
OPEN_SHARE = 0.8


def market_frame(relaxation: float = 0.0625) -> pd.DataFrame:
    """A market table of the symbol; 16 relaxation volumes a session by default."""
    rows = {"symbol": ["QUAY"], "price": [50.0], "adv": [1_024_000], "daily_vol": [0.02]}
    return market_table.ensure(
        pd.DataFrame({**rows, "calendar": "XNYS", "relaxation": relaxation})
    ).frame


def market_of(frame: pd.DataFrame | None = None) -> Market:
    return market_arrays(market_frame() if frame is None else frame, Settings())


def signs(rng: np.random.Generator, count: int) -> np.ndarray:
    """Signs of trades whose lean changes at random, from one relaxation volume to the next."""
    lean = np.repeat(rng.uniform(0.1, 0.9, count // PIECES), PIECES)
    return np.where(rng.random(count) < lean, 1.0, -1.0)


def played(
    seed: int,
    *,
    sessions: int = 10,
    share: float = 0.0,
    link: float = 0.0,
    level_rate: float = 0.25,
) -> Tape:
    """A tape with quotes; the price moves by the model.

    share : s, the part of a reading's displacement that fades at the model's rate. link : by how
    many ground variances a reading of 1 raises the variance of the next relaxation volume.
    """
    rng, market, known = np.random.default_rng(seed), market_of(), load_calendar("XNYS")
    volume = float(market.relaxation_volume[0])
    per_session = PIECES * round(1.0 / float(market.relaxation[0]))
    count = per_session * sessions
    first = known.session_of(np.datetime64("2026-01-05").item())
    session = np.repeat(np.arange(first, first + sessions), per_session)
    at = np.tile((np.arange(per_session) + 0.5) / per_session, sessions)
    opens, closes = known.opens[session], known.closes[session]
    sign = signs(rng, count)
    quiet = np.full(count, 50.0)
    tape = Tape(
        symbol="QUAY",
        known=known,
        session=session,
        instant=(opens + at * (closes - opens)).astype(np.int64),
        price=quiet + 0.5 * SPREAD * sign,
        quantity=np.full(count, volume / PIECES),
        middle=quiet,
        auction=np.zeros(count, np.bool_),
    )
    middle = 50.0 * np.exp(np.cumsum(_moves(tape, market, rng, share, link, level_rate)))
    return Tape(**{**vars_of(tape), "price": middle + 0.5 * SPREAD * sign, "middle": middle})


def vars_of(tape: Tape) -> dict:
    """The fields of a tape."""
    return {name: getattr(tape, name) for name in tape.__dataclass_fields__}


def _moves(tape, market, rng, share, link, level_rate):
    """Log returns trade by trade: fading, what new flow displaces, and noise."""
    volume = float(market.relaxation_volume[0])
    reading = imbalance_along(tape, volume).reading
    start = np.concatenate(([0.0], reading[PIECES - 1 :: PIECES][:-1]))
    flow = tape.signed.sign.reshape(-1, PIECES).mean(axis=1)
    fading = -share * (1.0 - np.exp(-market.exponent)) * displacement(market, start * volume)
    moved = fading + displacement(market, flow * volume)
    level = np.repeat(
        rng.poisson(level_rate, len(tape.sessions.size)), len(flow) // len(tape.sessions.size)
    )
    rate = 1.0 + 2.0 * level + link * np.abs(start)
    unit = float((market.ground_vol**2 * market.relaxation)[0]) * OPEN_SHARE
    noise = rng.standard_normal((len(flow), PIECES)) * np.sqrt(unit * rate / PIECES)[:, None]
    return (noise + moved[:, None] / PIECES).ravel()


def frame_of(tape: Tape) -> pd.DataFrame:
    """The tape as a trades table."""
    times = pd.to_datetime(tape.instant, unit="ns", utc=True).tz_convert(tape.known.zone)
    return pd.DataFrame(
        {
            "symbol": tape.symbol,
            "time": [time.isoformat() for time in times.floor("us")],
            "price": tape.price,
            "quantity": tape.quantity,
            "bid": tape.middle - 0.5 * SPREAD,
            "ask": tape.middle + 0.5 * SPREAD,
        }
    )
