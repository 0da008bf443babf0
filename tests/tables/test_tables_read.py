"""What the canonical frames hold, whatever the cells came from."""

from __future__ import annotations

from datetime import time

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pandas.testing import assert_frame_equal

import scheduler
from scheduler.settings import Settings
from scheduler.tables import bars, market, orders, profiles, readings
from scheduler.tables.times import clock, date_time, moment, seconds
from scheduler.tables.write import write_file
from tests.samples import BARS, MARKET, ORDERS, PROFILES, READINGS, changed, csv_text

TABLES = [
    (orders, ORDERS),
    (market, MARKET),
    (profiles, PROFILES),
    (readings, READINGS),
    (bars, BARS),
]


def test_orders_are_read_with_their_defaults():
    """Sides become signs, times canonical text; missing cells become the documented values."""
    frame = orders.ensure(pd.DataFrame(ORDERS)).frame
    assert frame["side"].tolist() == [1, -1]
    assert frame["quantity"].tolist() == [12000.0, 800.0]
    assert frame["start"].tolist() == ["10:00:00", None]
    assert frame["end"].tolist() == ["15:30:00", None]
    assert frame["min_slice"].tolist() == [100.0, 0.0]
    assert frame["must_complete"].tolist() == [False, True]
    assert frame["max_participation"].tolist() == pytest.approx([0.2, np.nan], nan_ok=True)
    assert frame["arrival_price"].isna().all()
    kinds = {"side": "int64", "quantity": "float64", "must_complete": "bool"}
    assert {name: str(frame[name].dtype) for name in kinds} == kinds


def test_market_is_read_with_its_defaults():
    """Optional columns that are not there are filled; an assumed calendar is said."""
    bare = {name: MARKET[name] for name in ("symbol", "price", "adv", "daily_vol")}
    checked = market.ensure(pd.DataFrame(bare))
    row = checked.frame.iloc[0]
    assert (row["calendar"], row["lot_size"], row["spread_bps"]) == ("XNYS", 1.0, 0.0)
    assert (row["buy_fee_bps"], row["sell_fee_bps"], row["fee_per_share"]) == (0.0, 0.0, 0.0)
    assert row[["currency", "profile", "group"]].tolist() == [None, None, None]
    assert row[["fx", "relaxation", "impact_exponent"]].isna().all()
    assert checked.notes == ("market: calendar not given, XNYS assumed, for QUAY, MILL",)


@pytest.mark.parametrize(("module", "table"), TABLES)
def test_a_frame_has_every_column_whatever_was_given(module, table):
    """The canonical frame has all columns of the rules, in their order, and no problem."""
    checked = module.ensure(pd.DataFrame(table))
    assert list(checked.frame.columns) == module.TABLE.header
    assert len(checked.frame) == 2
    assert checked.rows.tolist() == [2, 3]


@pytest.mark.parametrize(
    ("text", "sign"),
    [
        *((text, 1) for text in ("buy", "BUY", "b", "B", "1", " Buy ")),
        *((text, -1) for text in ("sell", "Sell", "S", "2", "5", "6")),
    ],
)
def test_sides_in_every_spelling(text, sign):
    """Words, letters and the values 1, 2, 5, 6 of FIX tag 54, in any case."""
    assert orders.ensure(changed(ORDERS, side=text)).frame["side"].iat[1] == sign


def test_high_volatility_is_noted_and_its_bounds_can_be_set():
    """Above 0.10 a note; the settings move both bounds."""
    frame = changed(MARKET, daily_vol="0.12")
    assert market.ensure(frame).notes == (
        "market: daily_vol above 0.1 per square root of a day for MILL",
    )
    wide = Settings().with_values("checks", max_daily_vol=0.5, warn_daily_vol=0.3)
    assert market.ensure(frame, settings=wide).notes == ()
    assert market.ensure(changed(MARKET, daily_vol="0.4"), settings=wide).notes != ()


def test_fractional_lots_trade_round_the_clock():
    """On calendar 24/7 a lot may be a fraction."""
    frame = market.ensure(changed(MARKET, calendar="24/7", lot_size="0.001")).frame
    assert frame["lot_size"].tolist() == [1.0, 0.001]


def test_times_are_written_one_way():
    """Equal times have equal text."""
    assert moment("9:30") == moment("09:30:00") == "09:30:00"
    assert moment("2026-01-05 10:00") == "2026-01-05T10:00:00"
    assert moment("2026-01-05T10:00Z") == moment("2026-01-05T10:00:00+00:00")
    assert moment("2026-01-05T10:00-0500") == "2026-01-05T10:00:00-05:00"
    assert date_time("2026-01-05") == "2026-01-05T00:00:00"
    assert seconds(clock("24:00")) == 24 * 3600
    assert seconds(clock("09:30")) == 34200


TYPED = [
    (orders, ORDERS, {"quantity": [12000, 800], "must_complete": [False, None]}),
    (orders, ORDERS, {"quantity": [12000.0, 800.0], "min_slice": [100, np.nan]}),
    (orders, ORDERS, {"side": [1, 2], "start": [time(10, 0), None]}),
    (orders, ORDERS, {"max_participation": [0.2, np.nan], "end": [time(15, 30), None]}),
    (market, MARKET, {"price": [101.25, 7.5], "adv": [2_000_000, 350_000]}),
    (market, MARKET, {"daily_vol": np.array([0.018, 0.03]), "spread_bps": [4, 11.5]}),
    (profiles, PROFILES, {"volume_share": [0.9, 0.1], "start": [time(9, 30), time(16)]}),
    (orders, ORDERS, {"symbol": [b"QUAY", b"MILL"], "must_complete": [False, True]}),
    (orders, ORDERS, {"symbol": pd.Categorical(["QUAY", "MILL"]), "side": ["b", "s"]}),
    (orders, ORDERS, {"quantity": pd.array([12000, 800], "Int64")}),
    (readings, READINGS, {"imbalance": [0.4, -1.5]}),
    (bars, BARS, {"time": pd.to_datetime(["2026-01-05", "2026-01-06"]), "volume": [1900000, 0]}),
]


@pytest.mark.parametrize(("module", "table", "typed"), TYPED)
def test_typed_cells_mean_the_same_as_text(put, module, table, typed):
    """Numbers, booleans, times and timestamps of a frame or of Parquet equal their text."""
    frame = pd.DataFrame({**table, **typed})
    expected = module.ensure(put("t.csv", csv_text(table))).frame
    assert_frame_equal(module.ensure(frame).frame, expected)
    path = put("t.parquet", frame.to_parquet(index=False))
    assert_frame_equal(module.ensure(path).frame, expected)


def test_timestamps_with_offset_keep_it():
    """A zoned timestamp is its ISO text with offset."""
    frame = pd.DataFrame(ORDERS)
    frame["start"] = pd.to_datetime(["2026-01-05 10:00", None]).tz_localize("America/New_York")
    frame["end"] = None
    start = orders.ensure(frame).frame["start"]
    assert start.tolist() == ["2026-01-05T10:00:00-05:00", None]


@pytest.mark.parametrize(("module", "table"), TABLES)
@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_a_canonical_frame_written_and_read_is_itself(tmp_path, module, table, suffix):
    """Canonical frames are their own fixed point, in memory and through both kinds of file."""
    frame = module.ensure(pd.DataFrame(table)).frame
    assert_frame_equal(module.ensure(frame).frame, frame)
    write_file(tmp_path / f"t{suffix}", frame)
    assert_frame_equal(module.ensure(tmp_path / f"t{suffix}").frame, frame)


IDS = st.text(min_size=1, max_size=24).filter(
    lambda text: text.isprintable() and text == text.strip() and text[0] not in "=+-@"
) | st.sampled_from(
    ["NA", "TRUE", "null", "None", "nan", "0005", "12345678901234567890", "1e5", '"', "a,b", "'x"]
)


@given(names=st.lists(IDS, min_size=1, max_size=8, unique=True), parquet=st.booleans())
def test_any_printable_id_survives_a_round_trip(tmp_path_factory, names, parquet):
    """NA, TRUE, 0005, 20 digits, quotes, commas and any script come back as they were."""
    frame = pd.DataFrame({"order_id": names, "symbol": names, "side": "buy", "quantity": "1"})
    path = tmp_path_factory.mktemp("ids") / ("t.parquet" if parquet else "t.csv")
    write_file(path, orders.ensure(frame).frame)
    again = orders.ensure(path).frame
    assert again["order_id"].tolist() == names
    assert again["symbol"].tolist() == names


@given(st.floats(min_value=1e-12, max_value=1e12, exclude_min=True))
def test_prices_survive_a_round_trip_to_the_last_bit(price):
    """The shortest digits of a float read back as that float."""
    frame = pd.DataFrame({**MARKET, "price": [repr(price), "1"]})
    assert market.ensure(frame).frame["price"].iat[0] == price


def test_whole_ids_in_a_numeric_column_have_no_point():
    """A missing cell makes pandas hold integers as floats; the ids are still integers."""
    frame = pd.DataFrame({**ORDERS, "order_id": [700.0, 701.0]})
    assert orders.ensure(frame).frame["order_id"].tolist() == ["700", "701"]


def test_byte_order_mark_quotes_and_line_ends_are_read(put):
    """The ways in which spreadsheets save CSV in UTF-8."""
    text = csv_text(ORDERS).replace("\n", "\r\n")
    path = put("t.csv", b"\xef\xbb\xbf" + text.encode())
    assert_frame_equal(orders.ensure(path).frame, orders.ensure(pd.DataFrame(ORDERS)).frame)


def test_the_callers_frame_is_left_as_it_was():
    """Checking reads a frame, and changes nothing in it."""
    frame = pd.DataFrame(PROFILES).astype({"volume_share": float})
    before = frame.copy(deep=True)
    result = profiles.ensure(frame).frame
    result.loc[0, "volume_share"] = 0.0
    assert_frame_equal(frame, before)


def test_the_readers_of_the_package_give_the_canonical_frames(put):
    """`scheduler.read_...` are the public way to the same frames."""
    for module, table in TABLES:
        path = put(f"{module.TABLE.name}.csv", csv_text(table))
        read = getattr(scheduler, f"read_{module.TABLE.name}")
        assert_frame_equal(read(path), module.ensure(path).frame)
    assert scheduler.read_settings(put("s.toml", "")) == Settings()
