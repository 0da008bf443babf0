"""Every cell that breaks its column's rule is named by row, column, value, rule and remedy."""

from __future__ import annotations

import pandas as pd
import pytest

from scheduler.tables import bars, fills, market, orders, profiles, readings, trades
from tests.samples import (
    BARS,
    FILLS,
    MARKET,
    ORDERS,
    PROFILES,
    READINGS,
    TRADES,
    changed,
    csv_text,
    refused,
)

CASES = [
    (orders, ORDERS, "order_id", "", "must not be empty", "fill it in"),
    (orders, ORDERS, "order_id", "o-1", "repeats the order_id of row 2", "keep one row"),
    (orders, ORDERS, "order_id", "=1+1", "must not begin with", "rename"),
    (orders, ORDERS, "order_id", "1.23457E+19", "digits of the id are lost", "as text"),
    (orders, ORDERS, "symbol", "+MILL", "must not begin with", "rename"),
    (orders, ORDERS, "symbol", "-MILL", "must not begin with", "rename"),
    (orders, ORDERS, "symbol", "@MILL", "must not begin with", "rename"),
    (orders, ORDERS, "symbol", "\tMILL", "must not begin with", "rename"),
    (orders, ORDERS, "symbol", "\rMILL", "must not begin with", "rename"),
    (orders, ORDERS, "symbol", "MILL ", "blank at its beginning or end", "remove the blank"),
    (orders, ORDERS, "symbol", "MI\x1bLL", "control or invisible character", "remove"),
    (orders, ORDERS, "side", "hold", "is no side", "write buy or sell"),
    (orders, ORDERS, "side", "3", "is no side", "write buy or sell"),
    (orders, ORDERS, "quantity", "", "must not be empty", "shares to trade"),
    (orders, ORDERS, "quantity", "0", "must be above 0", "positive number of shares"),
    (orders, ORDERS, "quantity", "-800", "must be above 0", "positive number of shares"),
    (orders, ORDERS, "quantity", "1e16", "at most 1e+15", "positive number of shares"),
    (orders, ORDERS, "quantity", "1e999", "too large for a number", "check it"),
    (orders, ORDERS, "quantity", "nan", "is not finite", "write a number"),
    (orders, ORDERS, "quantity", "inf", "is not finite", "write a number"),
    (orders, ORDERS, "quantity", "-Infinity", "is not finite", "write a number"),
    (orders, ORDERS, "quantity", "1,000", "comma in a number", "without thousands separators"),
    (orders, ORDERS, "quantity", "1,5", "comma in a number", "with a decimal point"),
    (orders, ORDERS, "quantity", "1.234.567,8", "comma in a number", "with a decimal point"),
    (orders, ORDERS, "quantity", "1 000", "thousands separator", "without separators"),
    (orders, ORDERS, "quantity", "1'000", "thousands separator", "without separators"),
    (orders, ORDERS, "quantity", "1_000", "thousands separator", "without separators"),
    (orders, ORDERS, "quantity", "many", "is not a number", "decimal point"),
    (orders, ORDERS, "quantity", "0x10", "is not a number", "decimal point"),
    (orders, ORDERS, "quantity", "٣", "is not a number", "decimal point"),
    (orders, ORDERS, "start", "soon", "is no ISO 8601 time", "write HH:MM"),
    (orders, ORDERS, "start", "25:00", "is no time of day", "from 00:00"),
    (orders, ORDERS, "start", "2026-01-05", "date without a time", "2026-01-05T09:30"),
    (orders, ORDERS, "start", "2026-02-30T10:00", "no date on the calendar", "write it as in"),
    (orders, ORDERS, "start", "05/01/2026 10:00", "is no ISO 8601 time", "write HH:MM"),
    (orders, ORDERS, "max_participation", "20%", "as a percentage", "5% is 0.05"),
    (orders, ORDERS, "max_participation", "20", "must be from 0 to 1", "own over total"),
    (orders, ORDERS, "max_auction_participation", "-0.1", "must be from 0 to 1", "own over"),
    (orders, ORDERS, "min_slice", "-1", "must be from 0", "smallest slice"),
    (orders, ORDERS, "min_slice", "801", "is more than the quantity", "smaller slice"),
    (orders, ORDERS, "lot_size", "0", "must be above 0", "shares"),
    (orders, ORDERS, "must_complete", "maybe", "neither true nor false", "true or false"),
    (orders, ORDERS, "arrival_price", "0", "must be above 0", "currency per share"),
    (orders, ORDERS, "price_limit", "7.4", "limits are not modelled", "leave the cell empty"),
    (market, MARKET, "symbol", "QUAY", "repeats the symbol of row 2", "keep one row"),
    (market, MARKET, "price", "0", "must be above 0", "currency per share"),
    (market, MARKET, "price", "", "must not be empty", "currency per share"),
    (market, MARKET, "adv", "0", "must be above 0", "shares per session"),
    (market, MARKET, "adv", "-5", "must be above 0", "shares per session"),
    (market, MARKET, "daily_vol", "0", "must be at least 1e-06", "square root of a day"),
    (market, MARKET, "daily_vol", "0.26", "must be at most 0.25", "percent or an annual figure?"),
    (market, MARKET, "daily_vol", "35", "must be at most 0.25", "percent or an annual figure?"),
    (market, MARKET, "currency", "GBX", "minor unit", "write GBP (give pounds, not pence)"),
    (market, MARKET, "currency", "GBp", "minor unit", "write GBP"),
    (market, MARKET, "currency", "ZAC", "minor unit", "write ZAR"),
    (market, MARKET, "currency", "ILA", "minor unit", "write ILS"),
    (market, MARKET, "currency", "gbp", "no ISO 4217 currency code", "did you mean 'GBP'?"),
    (market, MARKET, "currency", "QQQ", "no ISO 4217 currency code", "such as USD"),
    (market, MARKET, "fx", "0", "must be above 0", "base currency per unit"),
    (market, MARKET, "calendar", "XQQQ", "no known exchange calendar", "XNYS, or 24/7"),
    (market, MARKET, "calendar", "xlon", "no known exchange calendar", "did you mean 'XLON'?"),
    (market, MARKET, "spread_bps", "-1", "must be from 0", "full quoted spread"),
    (market, MARKET, "lot_size", "0.5", "fraction of a share", "whole shares"),
    (market, MARKET, "relaxation", "11", "must be from 0.0001 to 10", "sessions of volume"),
    (market, MARKET, "impact_exponent", "0", "must be from 0.05 to 2", "delta"),
    (profiles, PROFILES, "profile", "flat", "built-in profile", "choose another name"),
    (profiles, PROFILES, "start", "noon", "is no time of day", "HH:MM"),
    (profiles, PROFILES, "start", "15:00", "before the end of the profile's row above", "overlap"),
    (profiles, PROFILES, "end", "15:59", "is not after start", "later than the start"),
    (profiles, PROFILES, "end", "24:01", "is no time of day", "to 24:00"),
    (profiles, PROFILES, "kind", "lunch", "no kind of trading", "continuous or auction"),
    (profiles, PROFILES, "volume_share", "-0.1", "must be from 0 to 1", "fraction"),
    (readings, READINGS, "imbalance", "5.01", "must be from -5 to 5", "2 min(B, S)"),
    (readings, READINGS, "imbalance", "", "must not be empty", "net buying"),
    (readings, READINGS, "time", "10", "is no ISO 8601 time", "write HH:MM"),
    (bars, BARS, "time", "2026-01-05", "repeats the symbol and time of row 2", "keep one row"),
    (bars, BARS, "time", "yesterday", "is no ISO 8601 time", "write"),
    (bars, BARS, "open", "102.5", "above the bar's high", "check the four prices"),
    (bars, BARS, "close", "100", "below the bar's low", "check the four prices"),
    (bars, BARS, "low", "102.5", "above the bar's high", "check the four prices"),
    (bars, BARS, "volume", "-1", "must be at least 0", "shares"),
    (bars, BARS, "high", "", "must not be empty", "highest price"),
    (trades, TRADES, "quantity", "0", "must be above 0", "shares"),
    (trades, TRADES, "time", "2026-01-05", "is a date without a time", "T09:30"),
    (trades, TRADES, "time", "10:00", "is no ISO 8601 time", "2026-01-05T10:00"),
    (fills, FILLS, "quantity", "0", "must be above 0", "shares"),
    (fills, FILLS, "price", "-1", "must be above 0", "currency per share"),
    (fills, FILLS, "time", "2026-01-05", "is a date without a time", "T09:30"),
    (fills, FILLS, "order_id", "", "must not be empty", "as in the orders table"),
]


def _named(module, column, value):
    return f"{module.TABLE.name}-{column}-{value!r}"


@pytest.mark.parametrize(
    ("module", "table", "column", "value", "rule", "remedy"),
    [pytest.param(*case, id=_named(case[0], *case[2:4])) for case in CASES],
)
def test_a_bad_cell_is_named_with_its_rule_and_remedy(
    put, module, table, column, value, rule, remedy
):
    """The message holds file, editor row, column, the cell's text, the rule and what to do."""
    path = put("t.csv", csv_text(changed(table, **{column: value})))
    found = [p for p in refused(module.ensure, path) if rule in p.rule]
    (problem,) = found
    named = "symbol" if rule.startswith("repeats the symbol") else column
    assert (problem.source, problem.row, problem.column) == (path, 3, named)
    if named == column:
        assert (problem.value or "") == value
    assert remedy in problem.remedy
    for part in (path, "row 3", rule, remedy):
        assert part in str(problem)


@pytest.mark.parametrize("module", [orders, market, profiles, readings, bars, trades, fills])
def test_each_required_column_is_missed(module):
    """A table without a required column is refused with the column's meaning."""
    optional = [column for column in module.TABLE.columns if not column.required]
    frame = pd.DataFrame({column.name: [""] for column in optional})
    missing = [p for p in refused(module.ensure, frame) if "is missing" in p.rule]
    required = {column.name: column.doc for column in module.TABLE.columns if column.required}
    assert [p.column for p in missing] == list(required)
    assert all(required[p.column] in p.remedy for p in missing)


def test_the_window_of_an_order_must_not_be_empty():
    """Start and end of the same form are compared, of different forms left for later."""
    bad = [("10:00", "10:00"), ("2026-01-05T10:00", "2026-01-04T15:00")]
    bad += [("2026-01-05T10:00-05:00", "2026-01-05T15:30+01:00")]
    for start, end in bad:
        found = refused(orders.ensure, changed(ORDERS, start=start, end=end))
        assert [(p.row, p.column, p.value, p.rule) for p in found] == [
            (3, "end", end, "is not after start")
        ]
    fine = [("10:00", "2026-01-05T09:00"), ("2026-01-05T10:00-05:00", "2026-01-05T09:00")]
    fine += [("2026-01-05T10:00-05:00", "2026-01-05T16:30+01:00"), ("15:00", "")]
    for start, end in fine:
        assert len(orders.ensure(changed(ORDERS, start=start, end=end)).frame) == 2


def test_profile_shares_far_from_one_are_refused_and_near_ones_scaled():
    """Off by more than half a percent is refused, less is scaled with a note."""
    found = refused(profiles.ensure, changed(PROFILES, volume_share="0.106"))
    (problem,) = found
    assert (problem.row, problem.column) == (2, "volume_share")
    assert "adds up to 1.006 over profile 'day'" in problem.rule

    checked = profiles.ensure(changed(PROFILES, volume_share="0.104"))
    assert checked.frame["volume_share"].sum() == pytest.approx(1, abs=1e-15)
    assert checked.notes == ("profiles: volume_share scaled to add up to 1 for day",)


def test_every_bad_cell_of_a_large_table_is_found_in_one_go(put):
    """100,000 rows, 3 % of them wrong in three ways: each is reported with its own row."""
    count = 100_000
    frame = pd.DataFrame(
        {
            "order_id": [f"o{at}" for at in range(count)],
            "symbol": "QUAY",
            "side": "buy",
            "quantity": "100",
        }
    )
    frame.loc[::100, "quantity"] = "1,000"
    frame.loc[1::100, "side"] = "hold"
    frame.loc[2::100, "order_id"] = "o0"
    found = refused(orders.ensure, put("big.csv", csv_text(frame)))
    expected = [
        (at + 2, column)
        for start in range(0, count, 100)
        for at, column in ((start, "quantity"), (start + 1, "side"), (start + 2, "order_id"))
    ]
    assert [(p.row, p.column) for p in found] == expected


def test_a_crossed_quote_is_refused_and_a_locked_one_is_not(put):
    """A bid above the ask; where one side is empty there is nothing to cross."""
    path = put("t.csv", csv_text(changed(TRADES, bid="100.05", ask="100.04")))
    (problem,) = refused(trades.ensure, path)
    assert (problem.row, problem.column, problem.value) == (3, "bid", "100.05")
    assert problem.rule == "is above the ask"
    assert len(trades.read_trades(changed(TRADES, bid="100.04", ask="100.04"))) == 2
    assert len(trades.read_trades(changed(TRADES, bid="100.05", ask=""))) == 2
