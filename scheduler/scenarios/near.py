"""Which value of each axis is nearest to what an order has in the base."""

from __future__ import annotations

from typing import Any

import numpy as np

from scheduler.figures import Figures
from scheduler.scenarios.axes import AXES, TIMES, Value
from scheduler.scenarios.study import Study
from scheduler.sessions import Kind, resolve

_NIL = 1e-300


def near_base(study: Study) -> list[dict[str, Value]]:
    """Of each order a value of every axis: the base's own, the one nearest to it, or the first."""
    base = study.base
    std = Figures(base.arrays, base.charges, study.base_shares).cost_std
    return [
        {
            name: _nearest_time(study, order, name)
            if name in TIMES
            else _nearest(name, values, own[name])
            for name, values in study.grid.axes.items()
        }
        for order, own in enumerate(_own(study, i, float(std[i])) for i in range(len(std)))
    ]


def _nearest_time(study: Study, order: int, name: str) -> Value:
    """The value nearest to the window's first or last moment."""
    base, values = study.base, study.grid.axes[name]
    calendar, stages = str(base.rows["calendar"].iat[order]), base.grids[order]
    own = stages.start[0] if name == "start" else stages.end[-1]
    moments = [resolve(str(v), date=base.date, calendar=calendar).tz_localize(None) for v in values]
    away = [abs(moment.to_datetime64() - own) for moment in moments]
    return values[int(np.argmin(away))]


def _nearest(name: str, values: tuple[Value, ...], own: Any) -> Value:
    """On axes that are scales by the ratio, where neither is nil; else by the difference."""
    if isinstance(own, str):
        return own if own in values else values[0]
    numbers = np.array(values, dtype=float)
    if AXES[name].logarithmic and own > 0.0:
        numbers, own = np.log(np.maximum(numbers, _NIL)), np.log(own)
    return values[int(np.argmin(np.abs(numbers - own)))]


def _own(study: Study, order: int, std: float) -> dict[str, Any]:
    """What the base has on each axis but start and end.

    Its urgency, whatever was asked for, is 2 lambda sqrt(Var), lambda implied.
    """
    base, settings = study.base, study.recipe.settings
    arrays, market = base.arrays, base.arrays.market
    urgency, risk_aversion = float(arrays.urgency[order]), float(arrays.risk_aversion[order])
    span = slice(int(base.layout.first[order]), int(base.layout.last[order]) + 1)
    continuous = base.kind[span] == Kind.CONTINUOUS
    side = float(base.rows["side"].to_numpy(dtype=float)[order])
    return {
        "urgency": urgency or 2.0 * risk_aversion * std,
        "risk_aversion": risk_aversion or (0.5 * urgency / std if std > 0.0 else 0.0),
        "max_participation": float(base.cap_rate[span][continuous].max(initial=0.0)),
        "bucket": settings.plan.bucket,
        "volume": 1.0,
        "volatility": 1.0,
        "reading": side * float(arrays.initial[order] / market.relaxation_volume[order]),
        "impact_law": settings.model.impact_law,
        "feedback": float(market.feedback[order]),
        "relaxation": float(market.relaxation[order]),
    }
