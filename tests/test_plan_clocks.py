"""A plan in time: readings, auctions, nights, lunch, half days, round the clock."""

from __future__ import annotations

from datetime import date

import numpy as np
import pandas as pd
import pytest

from scheduler import InputError, Plan
from tests.desk import name, planned, row_of, slices, task

HALF_DAY = date(2026, 11, 27)
"""XNYS closes at 13:00 on the day after Thanksgiving."""

CALL = pd.DataFrame(
    {
        "profile": ["call", "call"],
        "start": ["09:30", "16:00"],
        "end": ["16:00", "16:05"],
        "kind": ["continuous", "auction"],
        "volume_share": [0.8, 0.2],
        "variance_share": [1.0, 0.0],
    }
)
"""A close auction that lasts five minutes."""


def _read(imbalance: float | list[float], time: str | list[str] | None = None) -> pd.DataFrame:
    frame = pd.DataFrame({"imbalance": np.atleast_1d(imbalance)})
    frame["symbol"] = "OAKMERE"
    return frame if time is None else frame.assign(time=time)


def _shares(result: Plan) -> list[int]:
    shares: list[int] = slices(result)["shares"].tolist()
    return shares


# readings


def test_a_reading_fades_with_the_volume_up_to_time_zero() -> None:
    """90 of 390 minutes of a flat day: e^{-(90/390)/r} of it is left."""
    market = name(profile="flat", relaxation=0.2)
    left = 0.8 * np.exp(-(90.0 / 390.0) / 0.2)
    taken = planned(task(), market, at="11:00", readings=_read(0.8, "09:30"))
    fresh = planned(task(), market, at="11:00", readings=_read(left))
    stale = planned(task(), market, at="11:00", readings=_read(0.8))
    assert np.abs(np.subtract(_shares(taken), _shares(fresh))).max() <= 1
    assert row_of(taken)["impact"] == pytest.approx(row_of(fresh)["impact"], rel=1e-6)
    assert row_of(stale)["impact"] != pytest.approx(row_of(fresh)["impact"], rel=1e-2)


def test_an_orders_own_start_is_its_time_zero() -> None:
    """A later start fades the reading as a later planning time does."""
    market, reading = name(relaxation=0.2), _read(0.8, "09:45")
    later = planned(task(start="12:00"), market, at="10:00", readings=reading)
    at_noon = planned(task(), market, at="12:00", readings=reading)
    assert _shares(later) == _shares(at_noon)


def test_the_latest_reading_counts() -> None:
    """In whatever order the table has them."""
    three = _read([0.5, -0.7, 0.1], ["09:40", "10:20", "10:00"])
    last = planned(task(), name(), at="10:30", readings=three)
    alone = planned(task(), name(), at="10:30", readings=_read(-0.7, "10:20"))
    assert _shares(last) == _shares(alone)


def test_a_reading_after_the_planning_time_is_refused() -> None:
    """With its row and the time it is after."""
    with pytest.raises(InputError) as caught:
        planned(task(), name(), at="10:00", readings=_read([0.1, 0.2], ["09:50", "10:01"]))
    (problem,) = caught.value.problems
    assert (problem.source, problem.row, problem.column) == ("readings", 3, "time")
    assert problem.value == "10:01:00"
    assert "is after the planning time" in problem.rule


def test_a_reading_is_weighed() -> None:
    """Weight 0 is no reading; half the weight is half the reading."""
    none = planned(task(), name(), readings=_read(0.6), reading_weight=0.0)
    assert _shares(none) == _shares(planned(task(), name()))
    half = planned(task(), name(), readings=_read(0.6), reading_weight=0.5)
    assert _shares(half) == _shares(planned(task(), name(), readings=_read(0.3)))


def test_a_reading_on_our_side_makes_us_wait() -> None:
    """More buyers when we buy: it is in the price and will fade; when we sell, sell into it."""
    plain = planned(task(), name(), urgency=0.0)
    times = {}
    for side in ("buy", "sell"):
        read = planned(task(side=side), name(), urgency=0.0, readings=_read(0.5))
        times[side] = np.mean(np.cumsum(_shares(read)))
    assert times["buy"] < np.mean(np.cumsum(_shares(plain))) < times["sell"]


# auctions


def test_an_order_only_in_an_auction_has_no_risk_and_no_use_for_urgency() -> None:
    """One slice, at time zero's price plus its own impact; the implied risk aversion is 0."""
    order, market = task(10_000, start="16:01", end="16:05"), name(profile="call", spread_bps=5)
    results = [
        planned(order, market, at="15:00", profiles=CALL, urgency=urgency) for urgency in (0.0, 5.0)
    ]
    for result in results:
        assert slices(result)[["kind", "shares"]].to_numpy().tolist() == [["auction", 10_000]]
        figures = row_of(result)
        assert (figures["cost_std"], figures["risk_aversion"]) == (0.0, 0.0)
        assert figures["spread"] == 0.0
        assert figures["objective"] == figures["expected_cost"] > 0.0
        assert set(figures["quantiles"].values()) == {figures["expected_cost"]}
        assert figures["certificate"]["status"] == "proven"


def test_an_auction_is_in_the_window_in_which_it_ends() -> None:
    """Ending at 16:00 the order misses the call that lasts till 16:05."""
    early = planned(task(end="16:00"), name(profile="call"), profiles=CALL)
    late = planned(task(), name(profile="call"), profiles=CALL)
    assert "auction" not in set(slices(early)["kind"])
    assert slices(late)["kind"].iat[-1] == "auction"
    assert slices(late)["expected_volume"].iat[-1] == 200_000


# sessions


def test_two_sessions_have_a_night_between_them() -> None:
    """Its variance counts for what is left at the close, no row stands for it, Z fades by omega."""
    two = {"start": "2026-03-05T14:00", "end": "2026-03-06T11:00"}
    order, market = task(80_000, **two), name(profile="flat")
    chosen = {"urgency": 0.0, "max_participation": 0.2}
    plain = planned(order, market, **chosen)
    rows = slices(plain)
    days = rows["start"].str[:10]
    assert days.drop_duplicates().tolist() == ["2026-03-05", "2026-03-06"]
    assert set(rows["kind"]) == {"continuous"}
    first = rows[days == "2026-03-05"]
    left = float(first["remaining"].iat[-1])
    assert 0 < left < 80_000
    closing = first["cost_std_remaining"].iat[-1] ** 2
    morning = rows["cost_std_remaining"].iat[len(first)] ** 2
    night = 0.1875 * (50.0 * 0.02 * left) ** 2
    assert closing - morning > night
    at_risk = 0.8125 / 26 * (50.0 * 0.02 * left) ** 2  # of the first bucket of the next day
    assert closing - morning - night < 1.5 * at_risk

    relaxed = planned(order, market, overnight_relaxation=0.1, **chosen)
    here = slices(relaxed)
    at = len(first)
    theta = here["expected_volume"].iat[at] / 5e4
    grown = here["shares"].iat[at] / 5e4 * -np.expm1(-theta) / theta
    faded = here["imbalance"].iat[at - 1] * np.exp(-0.1 / 0.05 - theta)
    assert here["imbalance"].iat[at] == pytest.approx(faded + grown, rel=1e-9)


def test_the_night_makes_an_order_hurry() -> None:
    """More is done before a close with more variance behind it."""
    two = {"start": "2026-03-05T14:00", "end": "2026-03-06T11:00"}
    done = []
    for share in (0.0, 0.1875, 0.6):
        result = planned(task(60_000, **two), name(), urgency=0.5, overnight_share=share)
        rows = slices(result)
        done.append(rows.loc[rows["start"] < "2026-03-06", "shares"].sum())
    assert done == sorted(set(done))


def test_a_weekend_is_one_night() -> None:
    """Friday afternoon to Monday morning: two sessions, two dates."""
    window = {"start": "2026-03-06T15:00", "end": "2026-03-09T10:00"}
    result = planned(task(10_000, **window), name(), urgency=0.0, date=date(2026, 3, 6))
    rows = slices(result)
    # the clocks change on that Sunday
    assert rows["start"].str[-6:].drop_duplicates().tolist() == ["-05:00", "-04:00"]
    assert rows["shares"].sum() == 10_000


def test_a_half_day_ends_early_and_is_not_rescaled() -> None:
    """3.5 of 6.5 hours, the close auction at 13:00, less than a session's volume."""
    result = planned(task(), name(), date=HALF_DAY)
    rows = slices(result)
    assert rows["end"].max() == "2026-11-27T13:00:00-05:00"
    assert rows["kind"].iat[-1] == "auction"
    first_seven_half_hours = 0.12 + 0.086 + 0.073 + 0.066 + 0.061 + 0.057 + 0.054
    volume = 0.01 + first_seven_half_hours + 0.075
    assert rows["expected_volume"].sum() == pytest.approx(1e6 * volume)
    flat = slices(planned(task(), name(profile="flat"), date=HALF_DAY))
    assert flat["expected_volume"].sum() == pytest.approx(1e6 * 3.5 / 6.5)


@pytest.mark.parametrize(
    ("calendar", "lunch", "offset"),
    [("XTKS", ("11:30", "12:30"), "+09:00"), ("XHKG", ("12:00", "13:00"), "+08:00")],
)
def test_nothing_trades_at_lunch(calendar: str, lunch: tuple[str, str], offset: str) -> None:
    """No bucket meets it; the state stands still and the variance of lunch is counted."""
    result = planned(task(50_000), name(calendar=calendar), at="09:00")
    rows = slices(result)
    assert rows["start"].str.endswith(offset).all()
    clock = rows["start"].str[11:16], rows["end"].str[11:16]
    assert ((clock[1] <= lunch[0]) | (clock[0] >= lunch[1])).all()
    assert lunch[0] in set(clock[1])
    assert lunch[1] in set(clock[0])
    assert rows["shares"].sum() == 50_000


def test_round_the_clock_takes_fractions() -> None:
    """From 00:00 to 24:00 UTC; decimal lots add up to the last digit of the quantity."""
    coin = name(calendar="24/7", adv=3_000.0, lot_size=1e-8, price=40_000.0)
    for quantity in (12.34567891, 0.00012345, 3.0):
        result = planned(task(quantity), coin, at="00:00", bucket=60)
        rows = slices(result)
        assert len(rows) == 24
        assert rows["start"].iat[0] == "2026-03-05T00:00:00+00:00"
        assert rows["end"].iat[-1] == "2026-03-06T00:00:00+00:00"
        assert rows["shares"].sum() == pytest.approx(quantity, rel=1e-13)
        assert rows["cumulative"].iat[-1] == quantity
        lots = rows["shares"] / 1e-8
        assert (lots - lots.round()).abs().max() < 1e-4
    assert (rows["shares"] > 0).sum() > 3


def test_planning_late_plans_what_is_left_of_the_day() -> None:
    """The first bucket begins at the planning time, inside a regular one."""
    result = planned(task(), name(), at="13:07")
    rows = slices(result)
    assert rows["start"].iat[0] == "2026-03-05T13:07:00-05:00"
    assert rows["end"].iat[0] == "2026-03-05T13:15:00-05:00"
    assert result.summary["at"] == "2026-03-05T18:07:00+00:00"
    with_offset = planned(task(), name(), at="2026-03-05T19:07+01:00")
    assert with_offset.schedule.equals(result.schedule)


def test_a_list_over_several_exchanges_speaks_local_time() -> None:
    """A time of day is that of each order's exchange."""
    orders = [task(symbol="A", start="10:00"), task(symbol="B", start="10:00")]
    market = [name("A"), name("B", calendar="XTKS")]
    result = planned(orders, market, at="2026-03-04T20:00+00:00", readings=None)
    assert slices(result, "A-1")["start"].iat[0] == "2026-03-05T10:00:00-05:00"
    assert slices(result, "B-1")["start"].iat[0] == "2026-03-05T10:00:00+09:00"


def test_windows_that_cannot_be_kept_are_refused_by_row() -> None:
    """Each order with its row, its column and what the market's hours are."""
    orders = [
        task(symbol="A"),
        task(symbol="B", start="17:00", end="18:00"),
        task(symbol="C", end="10:00"),
    ]
    with pytest.raises(InputError) as caught:
        planned(orders, [name("A"), name("B"), name("C")], at="11:00")
    found = [(p.source, p.row, p.column) for p in caught.value.problems]
    assert found == [("orders", 3, "start"), ("orders", 4, "end")]
    assert "XNYS trades from 2026-03-05T09:30:00-05:00" in caught.value.problems[0].rule


def test_a_window_that_merely_overlaps_is_clipped_with_a_note() -> None:
    result = planned(task(start="08:00", end="17:00"), name())
    whole = planned(task(), name())
    assert slices(result).equals(slices(whole))
    assert [note.split(" ")[1] for note in result.notes[:2]] == ["start", "end"]
    assert all("clipped to" in note for note in result.notes[:2])
