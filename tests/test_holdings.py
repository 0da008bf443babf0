"""Orders of a transition: what is bought and sold, and what the user should know of it."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from scheduler.errors import InputError
from scheduler.holdings import orders_from_holdings
from scheduler.tables import holdings, market
from scheduler.tables.inputs import read_inputs

SYMBOLS = ["QUAY", "MILL", "WEIR", "LOCK"]


def portfolio(**shares):
    return holdings.ensure(pd.DataFrame({"symbol": list(shares), "shares": list(shares.values())}))


def market_of(symbols=SYMBOLS, **columns):
    usual = {"price": 10.0, "adv": 1e6, "daily_vol": 0.02, "calendar": "XNYS", "currency": "USD"}
    frame = pd.DataFrame({"symbol": list(symbols)})
    return market.ensure(frame.assign(**usual | columns))


def rows(orders):
    return list(orders.itertuples(index=False, name=None))


def _refused(legacy, target, table):
    with pytest.raises(InputError) as caught:
        orders_from_holdings(legacy, target, table)
    return [(p.source, p.row, p.column, p.value, p.rule) for p in caught.value.problems]


def test_increases_are_bought_and_decreases_sold():
    """What both hold is counted out; order of legacy, then of what is new."""
    orders, _ = orders_from_holdings(
        portfolio(QUAY=500, MILL=300, WEIR=200), portfolio(LOCK=50, MILL=450, QUAY=500), market_of()
    )
    assert rows(orders) == [
        ("buy-MILL", "MILL", "buy", 150.0),
        ("sell-WEIR", "WEIR", "sell", 200.0),
        ("buy-LOCK", "LOCK", "buy", 50.0),
    ]


def test_the_orders_are_an_orders_table():
    """They pass every check that orders of a file do."""
    table = market_of()
    orders, _ = orders_from_holdings(portfolio(QUAY=500), portfolio(MILL=7), table)
    inputs = read_inputs(orders, table.frame)
    assert inputs.orders.frame["side"].tolist() == [-1, 1]
    assert inputs.orders.frame["quantity"].tolist() == [500.0, 7.0]


SHARES = st.dictionaries(st.sampled_from(SYMBOLS), st.integers(-1000, 1000), min_size=1)


@settings(max_examples=30)
@given(SHARES, SHARES, st.integers(1, 7))
def test_the_orders_lead_to_the_target_but_for_part_of_a_lot(legacy, target, lot):
    """Signed orders added to the legacy holdings fall short of the target by less than a lot."""
    before = np.array([legacy.get(symbol, 0) for symbol in SYMBOLS])
    after = np.array([target.get(symbol, 0) for symbol in SYMBOLS])
    assume((abs(after - before) >= lot).any())
    table = market_of(lot_size=lot)
    orders, _ = orders_from_holdings(portfolio(**legacy), portfolio(**target), table)
    signs = orders["side"].map({"buy": 1, "sell": -1})
    traded = (signs * orders["quantity"]).groupby(orders["symbol"]).sum()
    moved = traded.reindex(SYMBOLS).fillna(0).to_numpy()
    assert (orders["quantity"] % lot == 0).all()
    assert (np.abs(after - before - moved) < lot).all()
    assert (moved * (after - before - moved) >= 0).all()  # never beyond the target
    assert orders["order_id"].is_unique


def test_part_of_a_lot_is_left_with_a_note():
    """A change below one lot makes no order."""
    orders, notes = orders_from_holdings(
        portfolio(QUAY=0, MILL=0, WEIR=0),
        portfolio(QUAY=250, MILL=-99, WEIR=300),
        market_of(lot_size=100),
    )
    assert rows(orders) == [("buy-QUAY", "QUAY", "buy", 200.0), ("buy-WEIR", "WEIR", "buy", 300.0)]
    assert notes[0] == "less than a lot is left untraded for QUAY, MILL"


def test_fractions_are_whole_lots_round_the_clock():
    """0.3 in lots of 0.1 is three lots; large and fine figures are exact, too."""
    coins = market_of(calendar="24/7", lot_size=0.1)
    orders, notes = orders_from_holdings(portfolio(QUAY=0), portfolio(QUAY=0.3), coins)
    assert orders["quantity"].tolist() == [0.3]
    assert len(notes) == 1
    fine = market_of(calendar="24/7", lot_size=0.001)
    orders, notes = orders_from_holdings(portfolio(QUAY=0), portfolio(QUAY=123456789.123), fine)
    assert orders["quantity"].tolist() == [123456789.123]
    assert len(notes) == 1
    huge = market_of(lot_size=1)
    orders, _ = orders_from_holdings(portfolio(QUAY=-(10**9)), portfolio(QUAY=10**9), huge)
    assert orders["quantity"].tolist() == [2e9]


@pytest.mark.parametrize(("held", "wanted"), [(100, -50), (0, -150), (-50, -200)])
def test_a_sale_beyond_what_is_held_is_one_sale_with_a_note(held, wanted):
    """From long to short, from nothing, and from short to shorter."""
    orders, notes = orders_from_holdings(
        portfolio(QUAY=held, MILL=5), portfolio(QUAY=wanted, MILL=0), market_of()
    )
    assert rows(orders)[0] == ("sell-QUAY", "QUAY", "sell", 150.0)
    assert notes[0].startswith("sold short, in whole or in part: locate, marking and uptick rules")
    assert notes[0].endswith("of QUAY")


def test_covering_a_short_position_is_an_ordinary_purchase():
    """From short to long is one buy; nothing is said of short sales."""
    orders, notes = orders_from_holdings(portfolio(QUAY=-100), portfolio(QUAY=50), market_of())
    assert rows(orders) == [("buy-QUAY", "QUAY", "buy", 150.0)]
    assert not any("short" in note for note in notes)


def test_cash_is_given_by_currency():
    """Bought minus sold at the market's prices, needed or set free."""
    table = market_of(
        SYMBOLS, price=[10.0, 20.0, 1000.0, 1.0], currency=["USD", "USD", "JPY", "USD"]
    )
    _, notes = orders_from_holdings(
        portfolio(QUAY=500, WEIR=10), portfolio(MILL=400, LOCK=0), table
    )
    assert notes == (
        "cash JPY: 10,000.00 set free before costs: 0.00 bought, 10,000.00 sold",
        "cash USD: 3,000.00 needed before costs: 8,000.00 bought, 5,000.00 sold",
    )
    _, notes = orders_from_holdings(portfolio(QUAY=1), portfolio(QUAY=0), market_of(currency=""))
    assert notes == ("cash in base currency: 10.00 set free before costs: 0.00 bought, 10.00 sold",)


def test_symbols_that_change_are_in_the_market_table():
    """Named once, in the legacy holdings if they are there; what is kept needs no price."""
    legacy, target = portfolio(DOCK=5, GATE=7, PIER=1), portfolio(GATE=8, SLIP=2, PIER=1)
    rule = "is not in the market table market"
    assert _refused(legacy, target, market_of()) == [
        ("holdings", 2, "symbol", "DOCK", rule),
        ("holdings", 3, "symbol", "GATE", rule),
        ("holdings", 3, "symbol", "SLIP", rule),
    ]


def test_fractions_of_a_share_are_refused():
    """In either portfolio."""
    found = _refused(portfolio(QUAY=0.5), portfolio(MILL=1.5), market_of())
    rule = "is a fraction of a share"
    assert found == [
        ("holdings", 2, "shares", "0.5", rule),
        ("holdings", 2, "shares", "1.5", rule),
    ]


def test_nothing_to_trade_is_refused():
    """The same portfolio twice, or one that differs by parts of lots only."""
    same = portfolio(QUAY=5)
    ((_, _, _, _, rule),) = _refused(same, portfolio(QUAY=5, MILL=0), market_of())
    assert rule == "holds what the legacy holdings do"
    ((_, _, _, _, rule),) = _refused(same, portfolio(QUAY=6), market_of(lot_size=10))
    assert rule == "differs from the legacy holdings by less than a lot of each symbol"
