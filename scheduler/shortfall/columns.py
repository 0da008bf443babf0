"""The columns of a review's table of orders: labels, prices, money, and the place in the law."""

from __future__ import annotations

from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from scheduler.model.ragged import Array
from scheduler.sessions import Grid, Kind, local_texts
from scheduler.shortfall.chance import both_sides, holm
from scheduler.shortfall.parts import PARTS, Parts, adjusted, split
from scheduler.shortfall.taken import Taken
from scheduler.shortfall.traded import displacement_cost
from scheduler.tables.draft import Checked

AS_PLANNED, AS_TRADED = "plan", "as traded"


def parts_of(taken: Taken) -> Parts:
    """What each order's shortfall consists of."""
    layout, traded = taken.plan.book.layout, taken.traded
    return split(
        taken.side,
        taken.plan.book.arrays.quantity,
        taken.prices,
        taken.dealt,
        layout.sum(traded.charges.spread * traded.shares),
        layout.sum(displacement_cost(traded)),
    )


def labels(taken: Taken) -> dict[str, Any]:
    """What each order was, and how much of the volume it took."""
    book, market = taken.plan.book, taken.market
    done = taken.traded.traded
    total = np.where(np.isnan(market.volume), done + _expected_volume(taken), market.volume)
    return {
        "order_id": book.names,
        "symbol": book.rows["symbol"].to_numpy(),
        "side": np.where(taken.side > 0.0, "buy", "sell"),
        "group": book.rows["group"].to_numpy(dtype=object),
        "quantity": book.arrays.quantity,
        "start": [_start(grid) for grid in book.grids],
        "traded": done,
        "size": book.arrays.quantity / book.arrays.market.adv,
        "share_of_volume": np.where(total > 0.0, done / np.where(total > 0.0, total, 1.0), np.nan),
    }


def _start(grid: Grid) -> str | None:
    """An order's time zero, local with offset; none where it begins with its session's auction."""
    begins = grid.kind[0] == Kind.AUCTION
    instant = int(grid.time_zero.astype(np.int64))
    return None if begins else local_texts([instant], ZoneInfo(grid.timezone))[0]


def _expected_volume(taken: Taken) -> Array:
    """(N,) what the others were to trade up to the end of an order's last bucket with a fill."""
    layout = taken.plan.book.layout
    to_come = layout.reverse_cumsum(taken.traded.shares)
    return layout.sum(np.where(to_come > 0.0, taken.volume, 0.0))


def prices(taken: Taken) -> dict[str, Any]:
    """Prices in the order's own currency, and the average price against each, bps of it."""
    done = taken.traded.traded
    paid = taken.dealt.by_order(taken.dealt.shares * taken.dealt.price, len(done))
    average = np.where(done > 0.0, paid / np.where(done > 0.0, done, 1.0), np.nan) / taken.fx
    against = {
        "arrival": taken.prices.arrival / taken.fx,
        "vwap": taken.market.vwap,
        "twap": taken.market.twap,
        "close": taken.market.close,
    }
    return {
        "decision_price": taken.prices.decision / taken.fx,
        "average_price": average,
        **{f"{name}_price": price for name, price in against.items()},
        **{
            f"against_{name}_bps": 1e4 * taken.side * (average / price - 1.0)
            for name, price in against.items()
        },
    }


def money(taken: Taken, parts: Parts, closes: Checked | None) -> dict[str, Any]:
    """Parts of the shortfall, base currency and bps of the paper value."""
    paper = taken.plan.book.arrays.quantity * taken.prices.decision
    result: dict[str, Any] = {
        "notional": paper,
        "traded_value": taken.traded.traded * taken.prices.arrival,
        **{name: getattr(parts, name) for name in PARTS},
        "execution": parts.execution,
        "shortfall": parts.total,
        "shortfall_bps": 1e4 * parts.total / paper,
    }
    if closes is not None and closes.frame["market_move"].notna().any():
        known = taken.plan.book.rows[["symbol"]].merge(closes.frame, on="symbol", how="left")
        beta, move = (known[name].to_numpy(dtype=float) for name in ("beta", "market_move"))
        left = adjusted(parts.total, taken.side, paper, beta, move)
        result |= {"adjusted_shortfall": left, "adjusted_shortfall_bps": 1e4 * left / paper}
    return result


def outcome(taken: Taken, parts: Parts, false_alarms: float) -> dict[str, Any]:
    """The cost of what traded, against the arrival price, in the law promised for it.

    An order done in full is held against the plan's law; of one that was not, or was to be left
    unfinished, the law of what was traded.
    """
    promised, traded = taken.plan.figures, taken.traded
    quantity = promised.orders.quantity
    some = traded.traded > 0.0
    full = (np.abs(traded.traded - quantity) <= 1e-9 * quantity) & (promised.residual == 0.0)
    cost = parts.execution + parts.explicit
    traded_below = traded.chance_below(cost)
    mean, std, below = (
        np.where(some, np.where(full, ours, theirs), np.nan)
        for ours, theirs in (
            (promised.expected_cost, traded.expected_cost),
            (promised.cost_std, traded.cost_std),
            (promised.chance_below(cost), traded_below),
        )
    )
    below = np.where(std > 0.0, below, np.nan)  # without risk there is no chance to speak of
    chance = both_sides(below)
    as_traded = both_sides(np.where(some, traded_below, np.nan))
    flagged = holm(chance) <= false_alarms
    return {
        "cost": cost,
        "held_against": _held_against(full, some),
        "expected_cost": mean,
        "cost_std": std,
        "z": over(cost - mean, std),
        "quantile": below,
        "chance": chance,
        "adjusted_chance": holm(chance),
        "flagged": flagged,
        "expected_as_traded": np.where(some, traded.expected_cost, np.nan),
        "chance_as_traded": as_traded,
        "verdict": [
            _verdict(*each)
            for each in zip(
                flagged.tolist(),
                (cost > mean).tolist(),
                (full & (as_traded > false_alarms)).tolist(),
                some.tolist(),
                strict=True,
            )
        ],
    }


def over(away: Array, std: Array) -> Array:
    """Standard deviations from the mean; rounding counts for nothing where there is no risk."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(std > 0.0, away / std, np.nan)


def _held_against(full: Any, some: Any) -> list[str | None]:
    pairs = zip(full.tolist(), some.tolist(), strict=True)
    return [(AS_PLANNED if whole else AS_TRADED) if any_ else None for whole, any_ in pairs]


def _verdict(flagged: bool, dearer: bool, explained: bool, some: bool) -> str:
    if not some:
        return "nothing traded"
    if not flagged:
        return "chance can explain it"
    words = f"{'dearer' if dearer else 'cheaper'} than chance explains"
    return f"{words}; what was traded when, which is not the plan, does" if explained else words
