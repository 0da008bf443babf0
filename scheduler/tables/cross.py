"""Checks that need more than one table: do orders, market, profiles and readings fit together?

After these checks a plan may rely on: every order's symbol is in the market table; orders of one
symbol are of one side and share caps and lots; a fraction of a share only round the clock; every
profile has a shape; every order's money can be converted (`fx` missing means 1).
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from scheduler.errors import Problem
from scheduler.settings import DEFAULTS, Settings
from scheduler.tables.currencies import CODES
from scheduler.tables.draft import Checked, some
from scheduler.tables.market import ROUND_THE_CLOCK
from scheduler.tables.profiles import BUILT_IN


def check_together(
    orders: Checked,
    market: Checked,
    profiles: Checked | None = None,
    readings: Checked | None = None,
    settings: Settings = DEFAULTS,
) -> tuple[list[Problem], list[str]]:
    """Problems and notes of tables that are each without problems of their own."""
    names = market.frame.set_index("symbol")
    problems = [
        *_unknown_symbols(orders, market),
        *_opposite_sides(orders),
        *_shared_symbols(orders, names["lot_size"], settings),
        *_fractions(orders, names["calendar"]),
        *_unknown_profiles(market, profiles),
        *_money(orders, market, settings),
    ]
    if readings is not None:
        problems += _unknown_symbols(readings, market)
    return problems, _unusual_sizes(orders, names["adv"], settings)


def base_currency(orders: pd.DataFrame, market: pd.DataFrame, settings: Settings) -> str:
    """The currency of all money figures; '' if neither settings nor market table name one."""
    if settings.cost.base_currency:
        return settings.cost.base_currency
    used = market.loc[market["symbol"].isin(orders["symbol"]), "currency"].dropna().unique()
    return str(used[0]) if len(used) == 1 else ""


def _unknown_symbols(table: Checked, market: Checked) -> list[Problem]:
    missing = ~table.frame["symbol"].isin(market.frame["symbol"])
    rule = f"is not in the market table {market.source}"
    return table.problems(missing.to_numpy(), "symbol", rule, "add a row for it there")


def _opposite_sides(orders: Checked) -> list[Problem]:
    frame = orders.frame
    first = frame.groupby("symbol", sort=False)["side"].transform("first")
    return orders.problems(
        (frame["side"] != first).to_numpy(),
        "symbol",
        "is both bought and sold",
        "net the orders first: trading against oneself costs twice",
    )


def _shared_symbols(orders: Checked, lots: pd.Series[float], settings: Settings) -> list[Problem]:
    """Orders of one symbol are solved as one total: they must agree on what bounds it."""
    frame, plan = orders.frame, settings.plan
    several = frame.duplicated(["symbol", "side"], keep=False).to_numpy()
    if not several.any():
        return []
    lot = frame["lot_size"].fillna(frame["symbol"].map(lots)).astype(np.float64)
    alike = {
        "max_participation": frame["max_participation"].fillna(plan.max_participation),
        "max_auction_participation": frame["max_auction_participation"].fillna(
            plan.max_auction_participation
        ),
        "lot_size": lot,
    }
    problems = []
    for column, values in alike.items():
        first = values.groupby([frame["symbol"], frame["side"]], sort=False).transform("first")
        rule = "differs from that of another order of the symbol"
        remedy = "give one for all: the symbol's orders trade as one total"
        problems += orders.problems(several & (values != first).to_numpy(), column, rule, remedy)
    part = (frame["quantity"] / lot + 1e-9) % 1.0 > 2e-9
    rule, remedy = "is not whole lots, and the symbol has several orders", "round it to whole lots"
    problems += orders.problems(several & part.to_numpy(), "quantity", rule, remedy)
    for column, asked in (
        ("must_complete", ~frame["must_complete"].astype(bool)),
        ("min_slice", frame["min_slice"] > 0.0),
    ):
        rule = "cannot be asked of a symbol with several orders"
        remedy = "leave it out, or combine them into one order"
        problems += orders.problems(several & asked.to_numpy(), column, rule, remedy)
    return problems


def _fractions(orders: Checked, calendars: pd.Series[str]) -> list[Problem]:
    whole = orders.frame["symbol"].map(calendars).fillna(ROUND_THE_CLOCK) != ROUND_THE_CLOCK
    problems = []
    for column in ("quantity", "min_slice", "lot_size"):
        part = whole & (orders.frame[column] % 1 > 0)
        problems += orders.problems(
            part.to_numpy(),
            column,
            "is a fraction of a share",
            f"give whole shares; fractions trade only on calendar {ROUND_THE_CLOCK}",
        )
    return problems


def _unknown_profiles(market: Checked, profiles: Checked | None) -> list[Problem]:
    known = [*BUILT_IN, *([] if profiles is None else profiles.frame["profile"].unique())]
    given = market.frame["profile"]
    unknown = (given.notna() & ~given.isin(known)).to_numpy()
    remedy = f"known: {some(known)}; others come with the profiles table"
    return market.problems(unknown, "profile", "is no known profile", remedy)


def _money(orders: Checked, market: Checked, settings: Settings) -> list[Problem]:
    """Every symbol that is traded needs a currency that converts into the base currency."""
    given = settings.cost.base_currency
    if given and given not in CODES:
        remedy = "write a code such as USD"
        rule = "is no ISO 4217 currency code"
        return [Problem("settings", None, "cost.base_currency", given, rule, remedy)]
    frame = market.frame
    used = frame["symbol"].isin(orders.frame["symbol"])
    filled = frame.loc[used, "currency"].dropna().unique().tolist()
    if len(filled) > 1 and not given:
        rule = "the orders are in more than one currency"
        remedy = "set base_currency (section [cost]), and give fx: base per unit of currency"
        return [Problem(market.source, None, "currency", some(filled), rule, remedy)]
    if filled and not given:
        empty = (used & frame["currency"].isna()).to_numpy()
        rule = "is empty, though other symbols have one"
        remedy = "fill it in, or set base_currency (section [cost])"
        bare = market.problems(empty, "currency", rule, remedy)
        return bare or _rates(market, used, filled[0])
    return _rates(market, used, given)


def _rates(market: Checked, used: pd.Series[bool], base: str) -> list[Problem]:
    frame = market.frame
    foreign = used & frame["currency"].notna() & (frame["currency"] != base)
    first = frame[foreign].groupby("currency")["fx"].transform("first").reindex(frame.index)
    missing = foreign & frame["fx"].isna()
    wrong = used & ~foreign & frame["fx"].notna() & (frame["fx"] != 1)
    differing = foreign & ((frame["fx"] / first - 1).abs() > 1e-6)
    rules = (
        (missing, f"must not be empty for another currency than {base}", "give base per unit"),
        (
            wrong,
            f"must be 1 or empty in the base currency {base}".rstrip(),
            "set base_currency (section [cost]) to the currency that fx converts into",
        ),
        (differing, "differs within one currency", "give one rate per currency"),
    )
    return [p for mask, *words in rules for p in market.problems(mask.to_numpy(), "fx", *words)]


def _unusual_sizes(orders: Checked, adv: pd.Series[float], settings: Settings) -> list[str]:
    size = orders.frame["quantity"] / orders.frame["symbol"].map(adv).astype(np.float64)
    notes = []
    for odd, limit, words in (
        (size > settings.checks.max_order_adv, settings.checks.max_order_adv, "above"),
        (size < settings.checks.min_order_adv, settings.checks.min_order_adv, "below"),
    ):
        if odd.any():
            names = orders.frame.loc[odd, "order_id"].tolist()
            text = f"quantity over adv {words} {limit:g} for {some(names)}"
            notes.append(f"{orders.source}: {text}: is it in shares?")
    return notes
