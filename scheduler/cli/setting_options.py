"""Options for the settings that are often changed, and the settings they make."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import click

from scheduler.cli.options import load_settings
from scheduler.settings import LAWS, SOLVERS, Settings

# settings that have an option of their own: name, section, help
_NUMBERS = (
    (
        "urgency",
        "plan",
        "U: basis points of expected cost paid to shed one basis point of standard deviation.",
    ),
    ("risk_aversion", "plan", "Lambda, 1/currency, in place of --urgency."),
    ("risk_budget", "plan", "Most standard deviation, bps of notional, at least cost."),
    ("cost_budget", "plan", "Most expected cost, bps of notional, at least risk."),
    ("bucket", "plan", "Bucket length, minutes."),
    ("max_participation", "plan", "Own over total volume in continuous trading, 0 to 1."),
    ("max_auction_participation", "plan", "Own over total volume in auctions, 0 to 1."),
    ("feedback", "model", "How much own imbalance raises variance; 0 switches it off."),
    ("relaxation", "model", "Relaxation of the imbalance, sessions of volume."),
)


def setting_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """An option for each setting that is often changed; the command line wins over the file."""
    for name, _section, text in reversed(_NUMBERS):
        flag = f"--{name.replace('_', '-')}"
        function = click.option(flag, name, type=float, metavar="NUMBER", help=text)(function)
    law = click.option("--impact-law", type=click.Choice(LAWS), help="A published impact law.")
    solver = click.option(
        "--solver",
        type=click.Choice(SOLVERS),
        help="interior: the project's own; conic: the same problem through a general solver.",
    )
    return law(solver(function))


def changed_settings(path: str | None, changed: dict[str, Any]) -> Settings:
    """The settings of the file, with what the command line changes; one aim replaces another."""
    return with_changes(load_settings(path), changed)


def with_changes(settings: Settings, changed: dict[str, Any]) -> Settings:
    """Settings with what the command line changes; one aim replaces another."""
    from scheduler.plan import AIMS  # noqa: PLC0415

    if any(changed[aim] is not None for aim in AIMS):
        settings = settings.with_unset("plan", *AIMS)
    sections = {name: section for name, section, _text in _NUMBERS}
    sections |= {"impact_law": "model", "solver": "plan"}
    for section in ("plan", "model"):
        values = {name: changed[name] for name, home in sections.items() if home == section}
        settings = settings.with_values(section, **values)
    return settings
