"""headrace: an optimal execution scheduler.

Importing this is cheap; what each name needs is loaded when the name is first used.
"""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from scheduler.calibrate import Calibration, calibrate
    from scheduler.errors import (
        HeadraceError,
        InfeasibleError,
        InputError,
        LostWorkersError,
        MissingExtraError,
        MisuseError,
        NotConvergedError,
        OutputError,
        Problem,
    )
    from scheduler.holdings import orders_from_holdings
    from scheduler.intake import Finish
    from scheduler.plan import Plan, plan
    from scheduler.rehearse import Rehearsal, rehearse
    from scheduler.replan import Replan, replan
    from scheduler.review import Review, review
    from scheduler.settings import Settings
    from scheduler.tables.bars import read_bars
    from scheduler.tables.closes import read_closes
    from scheduler.tables.constraints import read_constraints
    from scheduler.tables.corridors import read_corridors
    from scheduler.tables.estimates import read_estimates
    from scheduler.tables.exposures import read_exposures
    from scheduler.tables.factor_covariance import read_factor_covariance
    from scheduler.tables.fills import read_fills
    from scheduler.tables.holdings import read_holdings
    from scheduler.tables.market import read_market
    from scheduler.tables.orders import read_orders
    from scheduler.tables.profiles import read_profiles
    from scheduler.tables.readings import read_readings
    from scheduler.tables.returns import read_returns
    from scheduler.tables.settings_file import read_settings
    from scheduler.tables.trades import read_trades
    from scheduler.what_if import WhatIf, what_if
    from scheduler.written import read_plan

_HOMES = {
    "HeadraceError": "errors",
    "InfeasibleError": "errors",
    "InputError": "errors",
    "LostWorkersError": "errors",
    "MissingExtraError": "errors",
    "MisuseError": "errors",
    "NotConvergedError": "errors",
    "OutputError": "errors",
    "Problem": "errors",
    "Settings": "settings",
    "Finish": "intake",
    "Calibration": "calibrate",
    "calibrate": "calibrate",
    "Plan": "plan",
    "plan": "plan",
    "Rehearsal": "rehearse",
    "rehearse": "rehearse",
    "Replan": "replan",
    "replan": "replan",
    "Review": "review",
    "review": "review",
    "WhatIf": "what_if",
    "what_if": "what_if",
    "read_bars": "tables.bars",
    "read_closes": "tables.closes",
    "read_constraints": "tables.constraints",
    "read_corridors": "tables.corridors",
    "read_estimates": "tables.estimates",
    "read_exposures": "tables.exposures",
    "read_factor_covariance": "tables.factor_covariance",
    "read_fills": "tables.fills",
    "read_returns": "tables.returns",
    "read_holdings": "tables.holdings",
    "orders_from_holdings": "holdings",
    "read_market": "tables.market",
    "read_orders": "tables.orders",
    "read_plan": "written",
    "read_profiles": "tables.profiles",
    "read_readings": "tables.readings",
    "read_settings": "tables.settings_file",
    "read_trades": "tables.trades",
}

__all__ = [
    "Calibration",
    "Finish",
    "HeadraceError",
    "InfeasibleError",
    "InputError",
    "LostWorkersError",
    "MissingExtraError",
    "MisuseError",
    "NotConvergedError",
    "OutputError",
    "Plan",
    "Problem",
    "Rehearsal",
    "Replan",
    "Review",
    "Settings",
    "WhatIf",
    "calibrate",
    "orders_from_holdings",
    "plan",
    "read_bars",
    "read_closes",
    "read_constraints",
    "read_corridors",
    "read_estimates",
    "read_exposures",
    "read_factor_covariance",
    "read_fills",
    "read_holdings",
    "read_market",
    "read_orders",
    "read_plan",
    "read_profiles",
    "read_readings",
    "read_returns",
    "read_settings",
    "read_trades",
    "rehearse",
    "replan",
    "review",
    "what_if",
]


class _Package(ModuleType):
    """The package; a verb's function takes the place of the module that bears its name."""

    def __setattr__(self, name: str, value: object) -> None:
        # Importing a submodule binds it here, where it would hide the function of its name.
        if _HOMES.get(name) == name and isinstance(value, ModuleType):
            value = getattr(value, name)
        super().__setattr__(name, value)


sys.modules[__name__].__class__ = _Package


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)


def __dir__() -> list[str]:
    return sorted(__all__)
