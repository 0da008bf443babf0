"""Settings: one frozen object, its ranges held as data beside each field.

Every default names its unit and source; `Settings` is checked on construction, unknown
names are refused by `settings_from_dict`, and nothing here is process-wide.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import Field, dataclass, field, fields, replace
from difflib import get_close_matches
from typing import Any

from scheduler.errors import InputError, Problem

LAWS = ("imbalance", "rate-power", "root-lasting", "invariance-root")
SOLVERS = ("interior", "conic")


def number(default: float | None, low: float, high: float, doc: str) -> Any:
    """A numeric setting in [low, high]; None, where it is the default, means 'not set'."""
    return field(default=default, metadata={"low": low, "high": high, "doc": doc})


def choice(default: str, choices: tuple[str, ...], doc: str) -> Any:
    return field(default=default, metadata={"choices": choices, "doc": doc})


def text(default: str, doc: str) -> Any:
    return field(default=default, metadata={"doc": doc})


def _problems(section: str, settings: Any) -> list[Problem]:
    found = []
    for item in fields(settings):
        value = getattr(settings, item.name)
        rule = broken_rule(item, value)
        if rule:
            remedy = f"default {item.default!r}: {item.metadata['doc']}"
            found.append(
                Problem("settings", None, f"{section}.{item.name}", str(value), rule, remedy)
            )
    return found


def broken_rule(item: Field[Any], value: Any) -> str | None:
    meta = item.metadata
    if value is None and item.default is None:
        return None
    if "choices" in meta:
        return None if value in meta["choices"] else f"must be one of {', '.join(meta['choices'])}"
    if "low" in meta:
        low, high = meta["low"], meta["high"]
        number = isinstance(value, (int, float)) and not isinstance(value, bool)
        if number and low <= value <= high:  # false for NaN
            return None
        return f"must be a number from {low:g} to {high:g}"
    return None if isinstance(value, str) else "must be text"


@dataclass(frozen=True)
class ModelSettings:
    """The market model; where the market table has a column of the same name, the table wins."""

    level_rate: float = number(
        0.25, 0.0, 10.0, "mean energy level nu, the Poisson rate (Orrell 2020)"
    )
    relaxation: float | None = number(
        None, 1e-4, 10.0, "relaxation r in sessions of volume; unset: the impact law's own"
    )
    impact_law: str = choice(
        "imbalance", LAWS, "published impact law: coefficient, exponent, relaxation"
    )
    impact_coefficient: float | None = number(
        None, 1e-6, 1000.0, "k on ground-state volatility; unset: the impact law's own"
    )
    impact_exponent: float | None = number(
        None, 0.05, 2.0, "delta; unset: the impact law's own (1/2 for imbalance)"
    )
    feedback: float = number(
        1.0, 0.0, 10.0, "phi, how much own imbalance raises variance; 0 switches it off"
    )
    permanent: float | None = number(
        None,
        0.0,
        10.0,
        "gamma of the permanent part; unset: the impact law's own (0 for imbalance)",
    )
    overnight_share: float = number(
        0.1875,
        0.0,
        0.9,
        "share of a day's variance in the closed period before it (French & Roll 1986: 13 times "
        "less variance per closed hour than per trading hour, 6 and 18 hours)",
    )
    overnight_relaxation: float = number(
        0.0, 0.0, 10.0, "omega, relaxation over a closed period, in sessions of volume"
    )
    reading_weight: float = number(1.0, 0.0, 1.0, "w, how much of a reading is believed")


@dataclass(frozen=True)
class CostSettings:
    """What trading costs beside impact."""

    crossing_share: float = number(
        1.0, 0.0, 1.0, "share of the continuous slices that pays the half spread"
    )
    base_currency: str = text("", "ISO 4217 code of all money figures; empty: the orders' only one")


@dataclass(frozen=True)
class PlanSettings:
    """What a plan is asked for."""

    urgency: float | None = number(
        None,
        0.0,
        1e6,
        "U: basis points of expected cost paid to shed one basis point of "
        "standard deviation; unset with every other aim unset: 0.1",
    )
    risk_aversion: float | None = number(None, 0.0, 1e12, "lambda, 1/currency, in place of urgency")
    risk_budget: float | None = number(
        None, 0.0, 1e5, "most standard deviation, basis points of notional, in place of urgency"
    )
    cost_budget: float | None = number(
        None, -1e5, 1e5, "most expected cost, basis points of notional, in place of urgency"
    )
    bucket: float = number(15.0, 0.25, 1440.0, "bucket length, minutes")
    max_participation: float = number(
        0.25, 0.0, 1.0, "own over total volume, continuous trading (common practice, from memory)"
    )
    max_auction_participation: float = number(
        0.10, 0.0, 1.0, "own over total volume, auctions (common practice, from memory)"
    )
    finish: str = text(
        "", "fractions to be done by given times, as in 0.9@14:30, separated by commas"
    )
    solver: str = choice("interior", SOLVERS, "which solver")


@dataclass(frozen=True)
class CheckSettings:
    """Where an input stops being believable."""

    max_daily_vol: float = number(0.25, 0.0, 10.0, "daily volatility above this is refused")
    warn_daily_vol: float = number(0.10, 0.0, 10.0, "daily volatility above this is warned about")
    max_order_adv: float = number(3.0, 0.0, 1e6, "quantity over ADV above this is warned about")
    min_order_adv: float = number(1e-7, 0.0, 1.0, "quantity over ADV below this is warned about")


@dataclass(frozen=True)
class JournalSettings:
    """Where plans are kept."""

    place: str = text(
        "",
        "a file, postgresql://HOST/DATABASE, or off for none; empty: journal.db in the platform's "
        "data directory",
    )


SECTIONS: dict[str, type[Any]] = {
    "model": ModelSettings,
    "cost": CostSettings,
    "plan": PlanSettings,
    "checks": CheckSettings,
    "journal": JournalSettings,
}


@dataclass(frozen=True)
class Settings:
    """All settings of a run; `Settings()` is the default of every command."""

    model: ModelSettings = field(default_factory=ModelSettings)
    cost: CostSettings = field(default_factory=CostSettings)
    plan: PlanSettings = field(default_factory=PlanSettings)
    checks: CheckSettings = field(default_factory=CheckSettings)
    journal: JournalSettings = field(default_factory=JournalSettings)

    def __post_init__(self) -> None:
        found = [p for name in SECTIONS for p in _problems(name, getattr(self, name))]
        if found:
            raise InputError(found)

    def as_dict(self) -> dict[str, dict[str, Any]]:
        """Nested tables, as `settings_from_dict` takes them; unset values are left out."""
        return {
            name: {
                item.name: value
                for item in fields(getattr(self, name))
                if (value := getattr(getattr(self, name), item.name)) is not None
            }
            for name in SECTIONS
        }

    def with_unset(self, section: str, *names: str) -> Settings:
        """A copy with fields of one section back at 'not set'."""
        return replace(
            self, **{section: replace(getattr(self, section), **dict.fromkeys(names, None))}
        )

    def with_values(self, section: str, **values: Any) -> Settings:
        """A copy with the given fields of one section replaced; None leaves a field alone."""
        known = [item.name for item in fields(SECTIONS[section])] if section in SECTIONS else []
        if section not in SECTIONS:
            raise InputError([_unknown("settings", section, list(SECTIONS), "section")])
        if unknown := [name for name in values if name not in known]:
            raise InputError(
                [_unknown("settings", f"{section}.{name}", known, "setting") for name in unknown]
            )
        given = {name: value for name, value in values.items() if value is not None}
        return replace(self, **{section: replace(getattr(self, section), **given)})


DEFAULTS = Settings()


def settings_from_dict(data: Mapping[str, Any], source: str = "settings") -> Settings:
    """Build settings from nested tables as TOML gives them; every problem is reported at once."""
    found: list[Problem] = []
    sections: dict[str, Any] = {}
    for name, values in data.items():
        if name not in SECTIONS or not isinstance(values, Mapping):
            found.append(_unknown(source, name, list(SECTIONS), "section"))
            continue
        known = [item.name for item in fields(SECTIONS[name])]
        found += [
            _unknown(source, f"{name}.{key}", known, "setting")
            for key in values
            if key not in known
        ]
        section = SECTIONS[name](**{key: value for key, value in values.items() if key in known})
        found += [replace(problem, source=source) for problem in _problems(name, section)]
        sections[name] = section
    if found:
        raise InputError(found)
    return Settings(**sections)


def _unknown(source: str, name: str, known: list[str], what: str) -> Problem:
    near = get_close_matches(name.rsplit(".", maxsplit=1)[-1], known, n=1)
    remedy = f"did you mean {near[0]!r}?" if near else f"known: {', '.join(known)}"
    return Problem(source, None, name, None, f"unknown {what}", remedy)
