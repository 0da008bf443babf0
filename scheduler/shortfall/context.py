"""Fills with what surrounded them: bucket, participation, imbalance, and what each part cost."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from scheduler.figures import Figures
from scheduler.intake import Book
from scheduler.model.ragged import Array
from scheduler.model.state import imbalance
from scheduler.sessions import Kind
from scheduler.shortfall.parts import Benchmarks, Dealt
from scheduler.shortfall.traded import Laid, displacement_cost

_GIVEN = ("order_id", "time", "quantity", "price", "venue", "fee")
_KINDS = np.array([kind.name.lower() for kind in sorted(Kind)])


def fills_frame(
    book: Book,
    traded: Figures,
    laid: Laid,
    dealt: Dealt,
    prices: Benchmarks,
    given: pd.DataFrame,
) -> pd.DataFrame:
    """A row a fill: what was given of it, its bucket, and its part of the execution.

    `bucket` counts from 1 as in the schedule; `volume` is what the others were to trade in it,
    `participation` own over total in it, `imbalance` Z/L at its end (+ is more buyers). Money in
    base currency; market_price in the order's.
    """
    order, stage = laid.order, laid.stage
    layout, arrays = book.layout, traded.orders
    side = book.rows["side"].to_numpy(dtype=float)
    fx = book.rows["fx"].fillna(1.0).to_numpy(dtype=float)
    volume = np.concatenate([grid.volume for grid in book.grids]) * arrays.market.adv[layout.owner]
    _, after = imbalance(layout, arrays.stages.theta, traded.flow, arrays.initial)
    lean = side[layout.owner] * after / arrays.market.relaxation_volume[layout.owner]
    part = dealt.shares / traded.shares[stage]
    number = layout.cumsum((book.kind != Kind.CLOSED).astype(float)).astype(np.int64)
    starts = np.array([text for grid in book.grids for text in grid.local_start], dtype=object)
    parts = _parts(side, traded, laid, dealt, prices, part)
    return (
        given[list(_GIVEN)]
        .reset_index(drop=True)
        .assign(
            symbol=book.rows["symbol"].to_numpy()[order],
            side=np.where(side[order] > 0.0, "buy", "sell"),
            bucket=number[stage],
            kind=_KINDS[book.kind[stage]],
            bucket_start=starts[stage],
            volume=volume[stage],
            participation=traded.flow[stage] / (traded.flow[stage] + volume[stage]),
            imbalance=lean[stage],
            arrival_price=prices.arrival[order] / fx[order],
            market_price=dealt.market / fx[order],
            value=dealt.shares * prices.arrival[order],
            **parts,
            expected_cost=part * traded.stage_cost[stage],
        )
    )


def _parts(
    side: Array,
    traded: Figures,
    laid: Laid,
    dealt: Dealt,
    prices: Benchmarks,
    part: Array,
) -> dict[str, Any]:
    """Each fill's part of the execution of its order, as `parts.split` has it of the whole."""
    signed = side[laid.order] * dealt.shares
    arrival = prices.arrival[laid.order]
    spread = traded.charges.spread[laid.stage] * dealt.shares
    moved = part * displacement_cost(traded)[laid.stage]
    timing = signed * (dealt.market - arrival) - moved
    paid = signed * (dealt.price - arrival)
    return {
        "spread_cost": spread,
        "displacement_cost": moved,
        "timing_cost": timing,
        "residual_cost": paid - spread - moved - np.nan_to_num(timing),
        "explicit_cost": dealt.fee,
    }
