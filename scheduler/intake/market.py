"""Market parameters and charges of each order, as arrays in base currency."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from scheduler.figures import Charges
from scheduler.model.laws import IMPACT_LAWS, ImpactLaw, invariance_spread_bps
from scheduler.model.ragged import Array, Ragged
from scheduler.model.stages import Market
from scheduler.sessions import Kind
from scheduler.settings import Settings

_BPS = 1e-4


def market_arrays(rows: pd.DataFrame, settings: Settings, law: str | None = None) -> Market:
    """Market parameters by order, in base currency.

    The market table's own columns win over the settings, the settings over the impact law. With
    `law` given, that published law alone is used, for a second opinion.
    """
    chosen = (
        settings.model
        if law is None
        else replace(
            settings.model,
            relaxation=None,
            impact_coefficient=None,
            impact_exponent=None,
            permanent=None,
            impact_law=law,
        )
    )
    base = IMPACT_LAWS[chosen.impact_law]
    level_rate = np.full(len(rows), chosen.level_rate)
    fx = rows["fx"].fillna(1.0).to_numpy(dtype=float)
    adv = rows["adv"].to_numpy(dtype=float)

    def pick(column: str, default: float | None, fallback: Array) -> Array:
        fill = fallback if default is None else np.full(len(rows), default)
        if law is not None:
            return fill
        given = rows[column].to_numpy(dtype=float)
        return np.where(np.isnan(given), fill, given)

    return Market(
        price=rows["price"].to_numpy(dtype=float) * fx,
        adv=adv,
        vol=rows["daily_vol"].to_numpy(dtype=float),
        level_rate=level_rate,
        relaxation=pick("relaxation", chosen.relaxation, np.full(len(rows), base.relaxation)),
        coefficient=pick(
            "impact_coefficient", chosen.impact_coefficient, base.coefficient(level_rate)
        ),
        exponent=pick("impact_exponent", chosen.impact_exponent, np.full(len(rows), base.exponent)),
        feedback=np.full(len(rows), chosen.feedback),
        permanent=_permanent(rows, chosen.permanent, base, adv),
    )


def _permanent(rows: pd.DataFrame, given: float | None, law: ImpactLaw, adv: Array) -> Array:
    if given is not None:
        return np.full(len(rows), given)
    return law.permanent(rows["shares_outstanding"].to_numpy(dtype=float) / adv)


def charges_of(
    rows: pd.DataFrame, market: Market, kind: NDArray[np.int8], layout: Ragged, settings: Settings
) -> Charges:
    """Half spread in continuous trading, and fees, base currency a share, by stage.

    `spread_bps` is the full quoted spread; auctions have none.
    """
    spread_bps = rows["spread_bps"].to_numpy(dtype=float)
    if settings.model.impact_law == "invariance-root":
        published = invariance_spread_bps(market.price, market.adv, market.vol)
        spread_bps = np.where(spread_bps > 0.0, spread_bps, published)
    half = 0.5 * spread_bps * _BPS * market.price * settings.cost.crossing_share
    buys = rows["side"].to_numpy() > 0
    fee_bps = np.where(buys, rows["buy_fee_bps"], rows["sell_fee_bps"]).astype(float)
    fx = rows["fx"].fillna(1.0).to_numpy(dtype=float)
    fees = fee_bps * _BPS * market.price + rows["fee_per_share"].to_numpy(dtype=float) * fx
    continuous = kind == Kind.CONTINUOUS
    return Charges(np.where(continuous, half[layout.owner], 0.0), fees[layout.owner])
