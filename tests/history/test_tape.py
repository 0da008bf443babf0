"""The imbalance along a tape: against direct sums, and against what a reading means."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from scheduler.errors import InputError
from scheduler.history.tape import Tape, imbalance_along, place_trades
from scheduler.sessions import load_calendar
from scheduler.tables import trades
from tests.tapes import frame_of, played, vars_of

KNOWN = load_calendar("XNYS")


def tape_of(sign, quantity, session=None) -> Tape:
    """A tape whose quotes give its signs (0: at the midpoint of a price that never moves)."""
    sign = np.array(sign, dtype=float)
    session = np.full(len(sign), 6000) if session is None else np.array(session)
    return Tape(
        symbol="QUAY",
        known=KNOWN,
        session=session,
        instant=KNOWN.opens[session] + np.arange(len(sign)),
        price=np.full(len(sign), 10.0),
        quantity=np.array(quantity, dtype=float),
        middle=10.0 - 0.01 * sign,
        auction=np.zeros(len(sign), np.bool_),
    )


def test_readings_equal_direct_sums():
    """B and S as weighted sums, each trade spread evenly over its own volume; L = 500."""
    rng = np.random.default_rng(3)
    sign, quantity = rng.integers(-1, 2, 60), rng.uniform(1.0, 90.0, 60)
    found = imbalance_along(tape_of(sign, quantity), 500.0)
    ends = np.cumsum(quantity)
    for i in range(60):
        age = (ends[i] - ends[: i + 1]) / 500.0
        weight = np.exp(-age) * -np.expm1(-quantity[: i + 1] / 500.0)
        bought, sold = (
            weight[sign[: i + 1] == side].sum() + 0.5 * weight[sign[: i + 1] == 0].sum()
            for side in (1, -1)
        )
        least = min(bought, sold)
        expected = np.sign(bought - sold) * 5.0
        if least > 0.0 and abs(bought - sold) < 10.0 * least:
            expected = (bought - sold) / (2.0 * least)
        assert found.reading[i] == pytest.approx(expected, abs=1e-12)
    assert found.clock == pytest.approx(ends / 500.0)
    assert found.readable.tolist() == (ends >= 500.0).tolist()


def test_a_lone_buyer_reads_as_the_models_own_state():
    """Every second trade balances the one before; a buyer of a tenth of that besides reads 0.1.

    With steady trading E/L tends to q/V.
    """
    sign = np.tile([1, -1, 1], 4000)
    quantity = np.tile([5.0, 5.0, 1.0], 4000)
    found = imbalance_along(tape_of(sign, quantity), 20_000.0)
    assert found.reading[-1] == pytest.approx(0.1, rel=0.01)


def test_all_on_one_side_is_the_largest_reading():
    found = imbalance_along(tape_of([-1] * 5, [100.0] * 5), 200.0)
    assert found.reading == pytest.approx(-5.0)


def test_a_missing_session_starts_anew_and_a_night_does_not():
    """Clock and state; with overnight relaxation a night counts as balanced volume."""
    sign, quantity = [1, 1, -1, 1], [60.0, 60.0, 1.0, 60.0]
    session = [6000, 6000, 6001, 6003]
    plain = imbalance_along(tape_of(sign, quantity, session), 100.0)
    assert plain.clock == pytest.approx([0.6, 1.2, 1.21, 0.6])
    assert plain.reading[3] == pytest.approx(5.0)
    night = imbalance_along(tape_of(sign, quantity, session), 100.0, 100.0)
    assert night.clock == pytest.approx([0.6, 1.2, 2.21, 0.6])
    assert abs(night.reading[2]) < abs(plain.reading[2])


def test_mirrored_signs_mirror_the_readings():
    tape = played(5, sessions=2)
    other = Tape(**{**vars_of(tape), "price": 2.0 * tape.middle - tape.price})
    volume = 64_000.0
    mirrored = imbalance_along(other, volume).reading
    assert mirrored == pytest.approx(-imbalance_along(tape, volume).reading)


def test_the_value_has_no_bounce():
    """Without quotes it is the mean of the latest prices bought and sold at, within a session."""
    tape = played(5, sessions=2)
    blind = Tape(**{**vars_of(tape), "middle": np.full(len(tape), np.nan)})
    # signs by tick of a moving price are not those of the quote; the level is
    assert np.abs(blind.value / tape.middle - 1.0).max() < 0.01
    still = Tape(
        **{
            **vars_of(blind),
            "price": 10.0 + 0.01 * np.where(np.arange(len(tape)) % 2, 1.0, -1.0),
        }
    )
    assert still.value[1] == 10.01  # nothing sold as yet
    assert still.value[2 : still.sessions.last[0]] == pytest.approx(10.0)
    assert still.value[still.sessions.first[1]] == still.price[still.sessions.first[1]]


# --- from the table


def placed(frame, calendar="XNYS"):
    return place_trades(trades.ensure(frame), {"QUAY": load_calendar(calendar)})


def test_a_tape_survives_its_table():
    """Times, prices, sessions and signs, to the microsecond."""
    tape = played(6, sessions=2)
    (found,), notes = placed(frame_of(tape))
    assert notes == ()
    assert found.signed.sign.tolist() == tape.signed.sign.tolist()
    assert found.session.tolist() == tape.session.tolist()
    assert np.abs(found.instant - tape.instant).max() < 1000
    assert found.middle == pytest.approx(tape.middle, rel=1e-12)


def test_trades_outside_the_sessions_are_left_out_and_auctions_are_not():
    """Before the open, at the close, an hour after it, on a Saturday."""
    clock = ["2026-01-05T09:29:59.9", "2026-01-05T10:00", "2026-01-05T16:00", "2026-01-05T17:00"]
    frame = pd.DataFrame(
        {"symbol": "QUAY", "time": [*clock, "2026-01-10T11:00"], "price": 10.0, "quantity": 100}
    )
    (tape,), (note,) = placed(frame)
    assert tape.auction.tolist() == [False, True]
    assert "3 of 5 trades are outside the sessions of XNYS" in note
    assert "row 2" in note


def test_a_symbol_without_a_market_row_is_left_out_and_said():
    frame = frame_of(played(6, sessions=1)).assign(symbol="MILL")
    tapes, (note,) = placed(frame)
    assert tapes == []
    assert note.startswith("MILL: ")


def test_times_that_go_back_are_refused():
    """Of one symbol; trades of one time keep their order."""
    frame = frame_of(played(6, sessions=1)).head(6)
    frame.loc[3, "time"] = frame.loc[1, "time"]
    with pytest.raises(InputError) as caught:
        placed(frame)
    (problem,) = caught.value.problems
    assert (problem.row, problem.column) == (5, "time")
    assert problem.rule == "is before the symbol's trade in the row above it"
    frame.loc[3, "time"] = frame.loc[2, "time"]
    assert len(placed(frame)[0][0]) == 6
