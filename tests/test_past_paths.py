"""Schedules played over sessions of the past, from bars with a known course."""

from __future__ import annotations

from html import escape
from importlib import import_module

import numpy as np
import pandas as pd
import pytest

from scheduler import Plan
from scheduler.rehearse import PAST, THE_LIST, rehearse
from tests.desk import name, planned, slices, task
from tests.listed import listed, rows
from tests.past import intraday_bars, session_dates

FLAT = np.full(78, 1.0 / 78)


def flat_plan(side: str = "buy", **options: object) -> Plan:
    """An order of one flat day, in buckets of half an hour, without energy levels."""
    chosen = {"urgency": 0.02, "bucket": 30.0, "level_rate": 0.0, "overnight_share": 0.0}
    order, market = task(40_000, side=side), name(profile="flat")
    return planned(order, market, **(chosen | options))


def straight(drift: float, *, symbol: str = "OAKMERE", count: int = 10) -> pd.DataFrame:
    """Bars whose price goes straight up by `drift` of itself each session, at forecast volume."""
    bars = intraday_bars(count, FLAT, FLAT, symbol=symbol, vol=1e-9, night=0.0)
    start = 1.0 + drift * np.arange(78) / 78
    frame = bars.assign(volume=np.tile(1e6 * FLAT, count))
    for column, shift in (("open", 0.0), ("close", drift / 78)):
        frame[column] = 50.0 * np.tile(start + shift, count)
    frame["high"], frame["low"] = frame[["open", "close"]].max(axis=1), frame["open"]
    return frame


@pytest.mark.parametrize(("side", "sign"), [("buy", 1.0), ("sell", -1.0)])
def test_a_price_that_goes_straight_up_costs_what_it_moved(side: str, sign: float) -> None:
    """By hand: each bucket pays the middle of its course, on top of the plan's own cost."""
    plan = flat_plan(side)
    result = rehearse(plan, paths=10, bars=straight(0.01))
    cost = result.played[PAST]["OAKMERE-1"].cost
    shares = slices(plan)["shares"].to_numpy()
    middle = (np.arange(len(shares)) + 0.5) / len(shares)
    moved = sign * 50.0 * float(shares @ (0.01 * middle))
    promised = plan.summary["orders"]["OAKMERE-1"]["expected_cost"]
    assert cost == pytest.approx(promised + moved, rel=1e-6)
    assert len(cost) == 10


def test_volumes_of_the_past_bind_the_caps() -> None:
    """At a tenth of the forecast volume, what a quarter of it allows is filled and no more."""
    plan = flat_plan()
    bars = straight(0.0)
    bars["volume"] *= 0.1
    result = rehearse(plan, paths=10, bars=bars)
    played = result.played[PAST]["OAKMERE-1"]
    most = 1e5 * 0.25 / 0.75
    assert 40_000 - played.residual == pytest.approx(most, rel=1e-6)
    assert result.summary["orders"]["OAKMERE-1"][PAST]["completed"] == 0.0


def test_a_random_walk_of_the_planned_volatility_keeps_the_promise() -> None:
    """Nearly sixty sessions of returns as planned: chance explains what differs."""
    bars = intraday_bars(60, FLAT, FLAT, symbol="OAKMERE", vol=0.02, night=0.0, seed=3)
    result = rehearse(flat_plan(feedback=0.0), paths=10, bars=bars)
    figures = result.summary["orders"]["OAKMERE-1"][PAST]
    assert figures["paths"] == 59  # one of them a half day
    assert figures["verdict"].startswith("as promised")
    wild = intraday_bars(60, FLAT, FLAT, symbol="OAKMERE", vol=0.05, night=0.0, seed=3)
    other = rehearse(flat_plan(feedback=0.0), paths=10, bars=wild)
    assert "larger" in other.summary["orders"]["OAKMERE-1"][PAST]["verdict"]


def test_the_planned_session_and_short_days_are_left_out() -> None:
    """Half days have other hours; what comes after the plan was not known."""
    bars = intraday_bars(12, FLAT, FLAT, symbol="OAKMERE", last="2026-03-06")
    result = rehearse(flat_plan(), paths=10, bars=bars)
    days = [day for day in session_dates(12, "2026-03-06") if day.isoformat() < "2026-03-05"]
    assert len(result.played[PAST]["OAKMERE-1"].cost) == len(days)
    short = intraday_bars(12, FLAT, FLAT, symbol="OAKMERE", last="2025-12-02")
    found = rehearse(flat_plan(), paths=10, bars=short)
    assert len(found.played[PAST]["OAKMERE-1"].cost) == 11  # the day after Thanksgiving is short


@pytest.mark.parametrize(
    ("bars", "said"),
    [
        (intraday_bars(9, FLAT, FLAT, symbol="OTHER"), "OAKMERE-1: has no bars"),
        (intraday_bars(3, FLAT, FLAT, symbol="OAKMERE"), "OAKMERE-1: has 3 full sessions"),
    ],
)
def test_orders_that_cannot_be_played_are_said(bars: pd.DataFrame, said: str) -> None:
    result = rehearse(flat_plan(), paths=10, bars=bars)
    assert PAST not in result.played
    assert any(note.startswith(said) for note in result.summary["notes"])


def test_a_list_is_played_on_the_sessions_that_all_names_have() -> None:
    """Its costs are the sums over its names, session by session."""
    tie = pd.DataFrame({"kind": ["cash"], "lower": ["-50%"], "upper": ["50%"]})
    orders = rows()[:2]
    plan = listed(orders, corridors=tie)
    frames = [
        straight(0.01, symbol="OAK", count=8),
        straight(0.02, symbol="ELM", count=10).iloc[78:],
    ]
    result = rehearse(plan, paths=10, bars=pd.concat(frames))
    cost = result.played[PAST][THE_LIST].cost
    assert len(cost) == 8
    single = [rehearse(plan, paths=10, bars=pd.concat([frame])) for frame in frames]
    assert all(PAST not in one.played for one in single)


def test_names_that_share_few_sessions_are_said() -> None:
    """Each has enough of its own; together they have three."""
    tie = pd.DataFrame({"kind": ["cash"], "lower": ["-50%"], "upper": ["50%"]})
    plan = listed(rows()[:2], corridors=tie)
    frames = [
        straight(0.01, symbol="OAK", count=13).iloc[: 8 * 78],
        straight(0.01, symbol="ELM", count=8),
    ]
    result = rehearse(plan, paths=10, bars=pd.concat(frames))
    assert PAST not in result.played
    said = "the list's names share 3 full sessions; 5 are needed"
    assert said in result.summary["notes"]
    pytest.importorskip("plotly")
    page = import_module("scheduler.report.rehearsal_page").page(result)
    assert escape(said) in page


def test_sessions_without_volume_are_no_sessions() -> None:
    """Nothing can trade in them; a symbol with no others is not played."""
    dead = straight(0.0)
    dead["volume"] = 0.0
    result = rehearse(flat_plan(), paths=10, bars=dead)
    assert PAST not in result.played
    future = straight(0.0)
    future["time"] = future["time"] + pd.Timedelta(days=3650)
    with_none = rehearse(flat_plan(), paths=10, bars=future)
    assert any("has 0 full sessions" in note for note in with_none.summary["notes"])
