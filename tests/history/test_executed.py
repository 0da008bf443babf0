"""Own orders laid on grids: shares, slippage, and what is refused."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from scheduler.errors import InputError
from scheduler.settings import Settings
from tests.executed_past import priced, read, slipped, tables
from tests.past import session_dates

ORDER = {
    "order_id": ["o-1"],
    "symbol": ["QUAY"],
    "side": ["buy"],
    "quantity": [30_000.0],
    "start": ["2026-02-24T10:00"],
    "arrival_price": [50.0],
}
MARKET = {
    "symbol": ["QUAY"],
    "price": [55.0],
    "adv": [1e6],
    "daily_vol": [0.02],
    "calendar": ["XNYS"],
    "spread_bps": [4.0],
    "profile": ["flat"],
}


def one(times, prices, quantity=10_000.0, **order):
    fills = pd.DataFrame({"order_id": "o-1", "time": times, "quantity": quantity, "price": prices})
    return pd.DataFrame(ORDER | {k: [v] for k, v in order.items()}), fills, pd.DataFrame(MARKET)


def refusal(made):
    with pytest.raises(InputError) as caught:
        read(made)
    (problem,) = caught.value.problems
    return problem


def test_slippage_is_the_average_price_against_the_arrival_price():
    """Bought 20 bp above it, less 2 bp of half spread, over 200 bp of volatility."""
    times = ["2026-02-24T10:05", "2026-02-24T10:20", "2026-02-24T11:00"]
    past = read(one(times, [50.0, 50.1, 50.2]))
    assert past.slippage == pytest.approx([(0.002 - 0.0002) / 0.02])
    assert past.quantity == pytest.approx([30_000.0])
    sold = read(one(times, [50.0, 49.9, 49.8], side="sell"))
    assert sold.slippage == pytest.approx(past.slippage)


def test_fills_lie_in_their_buckets():
    """Cut just before the first fill and at the last; quarters of an hour between."""
    past = read(one(["2026-02-24T10:05", "2026-02-24T10:20", "2026-02-24T10:40"], 50.0))
    assert past.shares[past.shares > 0.0].tolist() == [10_000.0] * 3
    # 10:00-10:05, 10:05-10:15, 10:15-10:30, 10:30-10:40 of 390 minutes of flat volume
    assert past.sessions[:4] == pytest.approx(np.array([5, 10, 15, 10]) / 390, rel=1e-6)
    assert np.flatnonzero(past.shares).tolist() == [1, 2, 3]


def test_an_order_over_a_night_and_a_closing_auction():
    """The night is a stage; a fill within a quarter of an hour of the close is of that session."""
    times = ["2026-02-24T15:50", "2026-02-24T16:00:05", "2026-02-25T16:00:10"]
    past = read(one(times, 50.0))
    open_shares = past.shares[past.stages.open]
    assert open_shares.sum() == 30_000.0
    assert past.stages.session.max() == 1
    assert past.shares[past.stages.session == 0].sum() == 20_000.0
    assert past.shares[-1] == 10_000.0
    assert (~past.stages.open).sum() == 1


def test_a_missing_start_is_the_open():
    past = read(one(["2026-02-24T10:05"], 50.0, quantity=30_000.0, start=""))
    assert past.sessions[:3].sum() == pytest.approx(35 / 390, rel=1e-6)


def test_prediction_is_the_models_cost_of_the_schedule():
    """Twice the shares cost 2^delta as much a share; k = 1; a fast order gets no relaxation."""
    times = ["2026-02-24T10:05", "2026-02-24T10:20"]
    small, large = (read(one(times, 50.0, quantity=q)) for q in (5_000.0, 10_000.0))
    ratio = large.predicted(0.6, 0.05) / small.predicted(0.6, 0.05)
    assert ratio == pytest.approx(2.0**0.6)
    # r so long that nothing fades: int_0^Q D dq / Q = D(Q)/(1 + delta)
    lasting = large.predicted(0.5, 1e4) * np.sqrt(1.5)
    assert lasting == pytest.approx((20_000.0 / 1e6) ** 0.5 / 1.5, rel=1e-3)


@pytest.mark.parametrize(
    ("made", "column", "rule"),
    [
        (one(["2026-02-24T10:05"], 50.0, arrival_price=""), "arrival_price", "is needed"),
        (one(["2026-02-24T10:05"], 50.0, symbol="MILL"), "symbol", "is not in the market table"),
        (one(["2026-02-24T10:05"], 50.0, order_id="o-2"), "order_id", "is not in the orders table"),
        (one(["10:05"], 50.0), "time", "has no date"),
        (one(["2026-02-24T09:45"], 50.0), "time", "is before its order's start"),
        (one(["2026-02-24T17:45"], 50.0), "time", "is outside the sessions of XNYS"),
        (one(["2026-02-22T10:05"], 50.0), "time", "is outside the sessions of XNYS"),
        (one(["2026-02-24T10:05"], 50.0, quantity=40_000.0), "quantity", "is less than its fills"),
        (one(["2026-02-24T10:05"], 50.0, start="2026-02-25T10:00"), "time", "is before its"),
    ],
)
def test_what_does_not_fit_is_refused_with_its_row(made, column, rule):
    """Unknown orders and symbols, no arrival price, no date, outside the session, too many."""
    problem = refusal(made)
    assert problem.column == column
    assert problem.rule.startswith(rule)
    assert problem.remedy


def test_tables_with_prices_of_a_law_have_its_slippage():
    """Through fill prices, both sides, and back: the same slippage."""
    made = tables(30, days=10)
    past = slipped(read(made), (1.4, 0.5, 0.05))
    again = read(priced(made, past))
    assert again.slippage == pytest.approx(past.slippage, abs=1e-9)
    assert again.day.tolist() == past.day.tolist()
    assert len(np.unique(past.day)) == len(session_dates(10, "2026-02-27"))


def test_orders_without_fills_are_left_out_and_said():
    from scheduler.history.executed import executed
    from scheduler.tables import fills, market, orders

    made = one(["2026-02-24T10:05"], 50.0)
    two = pd.concat([made[0], made[0].assign(order_id="o-2", symbol="MILL")])
    found, (note,) = executed(
        fills.ensure(made[1]), orders.ensure(two), market.ensure(made[2]), None, Settings()
    )
    assert len(found) == 1
    assert note == "orders without fills, left out: o-2"
