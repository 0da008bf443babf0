"""Tables that are right by themselves but do not fit together."""

from __future__ import annotations

import pandas as pd
import pytest

from scheduler.errors import InputError, MisuseError
from scheduler.settings import Settings
from scheduler.tables.cross import base_currency
from scheduler.tables.inputs import read_inputs, read_tables
from tests.samples import MARKET, ORDERS, PROFILES, READINGS, changed, csv_text

EUR = Settings().with_values("cost", base_currency="EUR")


def _refused(orders, market, **others):
    with pytest.raises(InputError) as caught:
        read_inputs(pd.DataFrame(orders), pd.DataFrame(market), **others)
    return [(p.source, p.row, p.column, p.value, p.rule) for p in caught.value.problems]


def test_tables_that_fit():
    """Frames, notes and the optional tables come back together."""
    inputs = read_inputs(
        pd.DataFrame(ORDERS),
        changed(MARKET, profile="day", daily_vol="0.11"),
        profiles=pd.DataFrame(PROFILES),
        readings=pd.DataFrame(READINGS),
    )
    assert inputs.orders.frame["order_id"].tolist() == ["o-1", "o-2"]
    assert inputs.profiles is not None
    assert inputs.readings is not None
    assert ["daily_vol above 0.1" in note for note in inputs.notes] == [True]


def test_a_symbol_that_the_market_table_lacks():
    """Of an order and of a reading, each with its own row."""
    found = _refused(
        changed(ORDERS, symbol="WEIR"), MARKET, readings=changed(READINGS, symbol="LOCK")
    )
    rule = "is not in the market table market"
    assert found == [
        ("orders", 3, "symbol", "WEIR", rule),
        ("readings", 3, "symbol", "LOCK", rule),
    ]


def test_opposite_sides_have_to_be_netted():
    """Buying and selling one symbol is refused."""
    found = _refused(changed(ORDERS, symbol="QUAY"), MARKET)
    assert found == [("orders", 3, "symbol", "QUAY", "is both bought and sold")]


def test_orders_of_one_symbol_must_agree_on_what_bounds_their_total():
    """Each row that does not is named, with what to do."""
    plain = {name: ORDERS[name] for name in ("order_id", "symbol", "side", "quantity")}
    orders = changed(plain, symbol="QUAY", side="buy")
    read_inputs(orders, pd.DataFrame(MARKET))
    for column, value, rule in (
        ("max_participation", "0.3", "differs from that of another order of the symbol"),
        ("max_auction_participation", "0.3", "differs from that of another order of the symbol"),
        ("lot_size", "10", "differs from that of another order of the symbol"),
        ("must_complete", "false", "cannot be asked of a symbol with several orders"),
        ("min_slice", "5", "cannot be asked of a symbol with several orders"),
    ):
        found = _refused(orders.assign(**{column: ["", value]}), MARKET)
        assert [(row, where, said) for _, row, where, _, said in found] == [(3, column, rule)]
    odd = orders.assign(quantity=["1005", "2000"], lot_size=["10", "10"])
    found = _refused(odd, MARKET)
    assert [(row, where) for _, row, where, _, _ in found] == [(2, "quantity")]


@pytest.mark.parametrize("column", ["quantity", "min_slice", "lot_size"])
def test_fractions_of_a_share_trade_only_round_the_clock(column):
    """Refused on an exchange's calendar, accepted on 24/7."""
    orders = changed(ORDERS, **{column: "7.5"})
    found = _refused(orders, MARKET)
    assert found == [("orders", 3, column, "7.5", "is a fraction of a share")]
    market = changed(MARKET, calendar="24/7")
    assert read_inputs(orders, market).orders.frame[column].iat[1] == 7.5


def test_a_profile_has_to_be_built_in_or_given():
    """Unknown names are refused with those that are known."""
    market = changed(MARKET, profile="day")
    assert _refused(ORDERS, market) == [("market", 3, "profile", "day", "is no known profile")]
    with pytest.raises(InputError, match="known: flat, u-shape; others come with"):
        read_inputs(pd.DataFrame(ORDERS), market)
    assert read_inputs(pd.DataFrame(ORDERS), changed(MARKET, profile="u-shape"))
    assert read_inputs(pd.DataFrame(ORDERS), market, profiles=pd.DataFrame(PROFILES))


def test_several_currencies_need_a_base_and_rates():
    """Without a base currency, without a rate, with a wrong rate: each is refused."""
    mixed = changed(MARKET, currency="EUR")
    assert _refused(ORDERS, mixed) == [
        ("market", None, "currency", "USD, EUR", "the orders are in more than one currency")
    ]
    rule = "must not be empty for another currency than EUR"
    assert _refused(ORDERS, mixed, settings=EUR) == [("market", 2, "fx", None, rule)]
    rates = mixed.assign(fx=["0.92", "1.1"])
    rule = "must be 1 or empty in the base currency EUR"
    assert _refused(ORDERS, rates, settings=EUR) == [("market", 3, "fx", "1.1", rule)]
    fine = mixed.assign(fx=["0.92", ""])
    assert read_inputs(pd.DataFrame(ORDERS), fine, settings=EUR).notes == ()


def test_one_currency_has_one_rate():
    """Two rates for one currency are refused at the second."""
    market = pd.DataFrame(MARKET).assign(fx=["0.92", "0.93"])
    found = _refused(ORDERS, market, settings=EUR)
    assert found == [("market", 3, "fx", "0.93", "differs within one currency")]


def test_a_currency_is_given_for_all_symbols_or_none():
    """Unless settings name the base currency that an empty cell stands for."""
    market = changed(MARKET, currency="")
    rule = "is empty, though other symbols have one"
    assert _refused(ORDERS, market) == [("market", 3, "currency", None, rule)]
    usd = Settings().with_values("cost", base_currency="USD")
    assert read_inputs(pd.DataFrame(ORDERS), market, settings=usd).notes == ()


def test_the_base_currency_has_to_exist():
    """An unknown code in the settings is refused."""
    wrong = Settings().with_values("cost", base_currency="QQQ")
    rule = "is no ISO 4217 currency code"
    expected = [("settings", None, "cost.base_currency", "QQQ", rule)]
    assert _refused(ORDERS, MARKET, settings=wrong) == expected


def test_symbols_that_are_not_traded_do_not_need_a_rate():
    """A market table may hold more than the orders ask for."""
    one = pd.DataFrame(ORDERS).iloc[:1]
    market = changed(MARKET, currency="EUR")
    inputs = read_inputs(one, market)
    assert base_currency(inputs.orders.frame, inputs.market.frame, Settings()) == "USD"
    assert base_currency(inputs.orders.frame, inputs.market.frame, EUR) == "EUR"


def test_sizes_that_are_hard_to_believe_are_noted():
    """Quantity over ADV above 3 or below 1e-7."""
    market = pd.DataFrame({**MARKET, "adv": ["3999", "9e9"]})
    large, small = read_inputs(pd.DataFrame(ORDERS), market).notes
    assert large == "orders: quantity over adv above 3 for o-1: is it in shares?"
    assert small == "orders: quantity over adv below 1e-07 for o-2: is it in shares?"


def test_problems_of_several_tables_are_one_error(put):
    """Each table is read to its end, and those that are right are compared."""
    sources = {
        "orders": put("o.csv", csv_text(changed(ORDERS, symbol="WEIR"))),
        "market": put("m.csv", csv_text(MARKET)),
        "profiles": put("p.csv", csv_text(changed(PROFILES, kind="lunch"))),
        "bars": put("b.csv", ""),
        "readings": None,
    }
    with pytest.raises(InputError) as caught:
        read_tables(sources)
    found = [(p.source.rsplit("/", 1)[-1], p.row, p.column) for p in caught.value.problems]
    assert found == [("p.csv", 3, "kind"), ("b.csv", None, None), ("o.csv", 3, "symbol")]


def test_standard_input_holds_one_table():
    """Two tables cannot both be read from it."""
    with pytest.raises(MisuseError, match="only one table can come from standard input"):
        read_tables({"orders": "-", "market": "-"})
