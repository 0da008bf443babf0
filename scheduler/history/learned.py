"""What trades and own fills teach, beside what bars do: readings, estimates, a settings file."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from scheduler.history.estimates import Estimate, of_findings, of_law, of_levels, settings_file
from scheduler.history.executed import executed
from scheduler.history.levels import Levels
from scheduler.history.slippage import Law, fit_law
from scheduler.history.taped import Taped, read_tapes
from scheduler.model.laws import IMPACT_LAWS
from scheduler.settings import Settings
from scheduler.tables.draft import Checked


@dataclass(frozen=True)
class Learned:
    """levels, tapes, law : None where there was nothing to estimate them from."""

    levels: Levels | None
    tapes: Taped | None
    law: Law | None
    estimates: tuple[Estimate, ...]
    notes: tuple[str, ...]

    @property
    def readings(self) -> pd.DataFrame | None:
        return None if self.tapes is None else self.tapes.readings

    @property
    def settings_file(self) -> str:
        return settings_file(self.estimates)

    def as_dict(self) -> dict[str, Any]:
        parts = {"levels": self.levels, "tapes": self.tapes, "impact": self.law}
        return {
            "settings": {each.setting: each.as_dict() for each in self.estimates},
            **{name: None if part is None else part.as_dict() for name, part in parts.items()},
        }


def learn(
    tables: Mapping[str, Checked],
    levels: Levels | None,
    settings: Settings,
) -> Learned:
    """Estimates from trades, and from fills with orders, where they are among the tables.

    tables : by name; a market table is among them. levels : from bars, if any.

    A level rate told from its default holds for what is estimated after it: k is on ground-state
    volatility, which depends on the rate.
    """
    market, profiles = tables["market"], tables.get("profiles")
    estimates: list[Estimate] = []
    notes: list[str] = []
    tapes = law = None
    if levels is not None:
        rate = of_levels(levels, settings.model.level_rate)
        estimates.append(rate)
        if rate.told_apart:
            settings = settings.with_values("model", level_rate=rate.value)
    if "trades" in tables:
        tapes = read_tapes(tables["trades"], market.frame, settings)
        notes += tapes.notes
        if tapes.found is not None:
            estimates.append(of_findings(tapes.found, settings.model.reading_weight))
    if "fills" in tables:
        past, more = executed(tables["fills"], tables["orders"], market, profiles, settings)
        law = fit_law(past, tables["fills"].source)
        estimates += of_law(law, _defaults(settings))
        notes += [*more, *_open_questions(law)]
    told = [each.text for each in estimates if each.setting != "level_rate"]  # levels have a note
    return Learned(levels, tapes, law, tuple(estimates), (*notes, *told))


def _defaults(settings: Settings) -> tuple[float, float, float]:
    """k, delta, r of a plan with these settings, where the market table is silent."""
    model = settings.model
    base = IMPACT_LAWS[model.impact_law]
    coefficient = float(base.coefficient(np.array([model.level_rate]))[0])
    return (
        coefficient if model.impact_coefficient is None else model.impact_coefficient,
        base.exponent if model.impact_exponent is None else model.impact_exponent,
        base.relaxation if model.relaxation is None else model.relaxation,
    )


def _open_questions(law: Law) -> list[str]:
    if law.identified:
        return []
    return [
        "the fills do not tell impact coefficient, exponent and relaxation apart: "
        f"{'; '.join(law.reasons)}. The fit is drawn towards published values; orders of more "
        "sizes and lengths would tell"
    ]
