"""Fills with what surrounded them: bucket, participation, imbalance, and what each part cost."""

from __future__ import annotations

from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from scheduler.model.ragged import Array
from scheduler.model.state import imbalance
from scheduler.sessions import Kind, local_texts
from scheduler.shortfall.taken import Taken
from scheduler.shortfall.traded import displacement_cost

_GIVEN = ("order_id", "time", "quantity", "price", "venue", "fee")
_KINDS = np.array([kind.name.lower() for kind in sorted(Kind)])


def fills_frame(taken: Taken, given: pd.DataFrame) -> pd.DataFrame:
    """A row a fill: what was given of it (`given`), its bucket, and its part of the execution.

    `bucket` counts from 1 as in the schedule; `volume` is what the others traded in it, or were to,
    `participation` own over total in it, `imbalance` Z/L at its end (+ is more buyers). Money in
    base currency; prices in the order's.
    """
    book, traded, dealt = taken.plan.book, taken.traded, taken.dealt
    order, stage = taken.laid.order, taken.laid.stage
    part = dealt.shares / traded.shares[stage]
    number = book.layout.cumsum((book.kind != Kind.CLOSED).astype(float)).astype(np.int64)
    starts = np.array([text for grid in book.grids for text in grid.local_start], dtype=object)
    volume, fx = taken.volume[stage], taken.fx[order]
    columns = {
        "time": _times(taken),
        "symbol": book.rows["symbol"].to_numpy()[order],
        "side": np.where(taken.side[order] > 0.0, "buy", "sell"),
        "bucket": number[stage],
        "kind": _KINDS[book.kind[stage]],
        "bucket_start": starts[stage],
        "volume": volume,
        "participation": traded.flow[stage] / (traded.flow[stage] + volume),
        "imbalance": _lean(taken)[stage],
        "arrival_price": taken.prices.arrival[order] / fx,
        "market_price": dealt.market / fx,
        "value": dealt.shares * taken.prices.arrival[order],
        **_parts(taken, part),
        "expected_cost": part * traded.stage_cost[stage],
    }
    return given[list(_GIVEN)].reset_index(drop=True).assign(**columns)


def _times(taken: Taken) -> list[str]:
    """Each fill's time with date and offset, so that it can be read without the plan."""
    zones = [ZoneInfo(grid.timezone) for grid in taken.plan.book.grids]
    instants = zip(taken.fills.frame["instant"].tolist(), taken.laid.order.tolist(), strict=True)
    return [local_texts([instant], zones[order])[0] for instant, order in instants]


def _lean(taken: Taken) -> Array:
    """(M,) Z/L at the end of each stage, as the market sees it."""
    arrays, layout = taken.traded.orders, taken.plan.book.layout
    _, after = imbalance(layout, arrays.stages.theta, taken.traded.flow, arrays.initial)
    result: Array = (taken.side / arrays.market.relaxation_volume)[layout.owner] * after
    return result


def _parts(taken: Taken, part: Array) -> dict[str, Any]:
    """Each fill's part of the execution of its order, as `parts.split` has it of the whole."""
    dealt, traded, stage = taken.dealt, taken.traded, taken.laid.stage
    signed = taken.side[dealt.order] * dealt.shares
    arrival = taken.prices.arrival[dealt.order]
    spread = traded.charges.spread[stage] * dealt.shares
    moved = part * displacement_cost(traded)[stage]
    timing = signed * (dealt.market - arrival) - moved
    paid = signed * (dealt.price - arrival)
    return {
        "spread_cost": spread,
        "displacement_cost": moved,
        "timing_cost": timing,
        "residual_cost": paid - spread - moved - np.nan_to_num(timing),
        "explicit_cost": dealt.fee,
    }
