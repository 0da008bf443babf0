"""Published impact laws in the model's form: coefficient k, exponent delta, relaxation r.

k is on ground-state volatility, so a constant published on observed volatility is multiplied by
sqrt(1 + 2 nu).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from scheduler.model.ragged import Array

_TURNOVER_INVERSE = 200.0  # shares outstanding over ADV where the market table is silent


@dataclass(frozen=True)
class ImpactLaw:
    """One law: `coefficient(nu)` gives k; `permanent(shares outstanding / ADV)` gives gamma."""

    source: str
    coefficient: Callable[[Array], Array]
    exponent: float
    relaxation: float
    permanent: Callable[[Array], Array] = np.zeros_like


def observed(constant: float) -> Callable[[Array], Array]:
    """k of a law whose constant was published on observed volatility."""
    return lambda level_rate: constant * np.sqrt(1.0 + 2.0 * level_rate)


def _turnover_root(turnover_inverse: Array) -> Array:
    """gamma = 0.314 (Theta/V)^{1/4} [ATHL 2005]."""
    known = np.where(np.isnan(turnover_inverse), _TURNOVER_INVERSE, turnover_inverse)
    result: Array = 0.314 * known**0.25
    return result


_RATE_RELAXATION = 0.005

IMPACT_LAWS: dict[str, ImpactLaw] = {
    "imbalance": ImpactLaw(
        "Orrell 2020; relaxation chosen so that the worked table of Almgren et al. 2005 is met",
        lambda level_rate: np.full_like(level_rate, np.sqrt(2.0)),
        0.5,
        0.05,
    ),
    # impact of the trading rate alone: with r so short that Z/L is the participation rate,
    # k (Z/ADV)^0.6 = 0.142 rate^0.6 on observed volatility asks for k = 0.142 r^-0.6
    "rate-power": ImpactLaw(
        "Almgren, Thum, Hauptmann & Li 2005",
        observed(0.142 * _RATE_RELAXATION**-0.6),
        0.6,
        _RATE_RELAXATION,
        _turnover_root,
    ),
    "root-lasting": ImpactLaw("Sato & Kanazawa 2024/25", observed(0.842), 0.489, 2.0),
    # mean cost 12.08 bp sqrt(X / 1% of V) at 2 % a day is two thirds of the end displacement
    "invariance-root": ImpactLaw(
        "Kyle & Obizhaeva 2016, square-root form", observed(0.906), 0.5, 2.0
    ),
}


def invariance_spread_bps(price: Array, adv: Array, vol: Array) -> Array:
    """Full spread in basis points, 2 * 2.08 (sigma/2 %) (W/W*)^{-1/3} [KO 2016].

    W = price * adv * vol; W* = 40 $ * 1e6 shares * 2 %.
    """
    result: Array = 2.0 * 2.08 * (vol / 0.02) * (price * adv * vol / 800_000.0) ** (-1.0 / 3.0)
    return result
