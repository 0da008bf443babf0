"""What every command that makes a plan is given: tables, settings, time; and the plan of it."""

from __future__ import annotations

from collections.abc import Callable
from functools import reduce
from typing import TYPE_CHECKING, Any

import click

from scheduler.cli.options import (
    finish_option,
    ignore_columns_option,
    settings_option,
    show_notes,
    table_options,
    when_options,
)
from scheduler.cli.setting_options import changed_settings, setting_options

if TYPE_CHECKING:
    from scheduler.plan import Plan

_TABLES = (
    "market",
    "profiles",
    "readings",
    "exposures",
    "factor_covariance",
    "returns",
    "corridors",
    "constraints",
)
_AS_GIVEN = (
    *(*_TABLES, "legacy", "target", "soften", "date", "at", "ignore_columns"),
    *("uncertainty", "worst_of"),
)


def planning_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """The options of `plan` but for what it puts out; given to `planned` as they come."""
    made = (
        click.argument("orders", required=False),
        table_options(*_TABLES),
        click.option(
            "--legacy", metavar="FILE", help="Holdings to start from, in place of ORDERS."
        ),
        click.option("--target", metavar="FILE", help="Holdings to end with."),
        click.option(
            "--soften", is_flag=True, help="Let corridors that cannot hold give way, least."
        ),
        click.option(
            "--uncertainty", metavar="FILE", help="Estimates with intervals (JSON) to draw from."
        ),
        click.option(
            "--worst-of",
            metavar="NAMES",
            default="",
            help="Least worst regret over impact laws, as in imbalance,root-lasting, or draws.",
        ),
        setting_options,
        finish_option,
        settings_option,
        when_options,
        ignore_columns_option,
    )
    return reduce(lambda inner, decorate: decorate(inner), reversed(made), function)


def planned(given: dict[str, Any], *, quiet: bool) -> Plan:
    """The plan of a command line, its notes said on standard error.

    Raises:
        click.UsageError: no orders or no market table.
    """
    if given["orders"] is None and given["legacy"] is None and given["target"] is None:
        raise click.UsageError("give the orders table, or --legacy and --target holdings")
    if given["market"] is None:
        raise click.UsageError("give the market table with --market FILE")
    from scheduler.cli.progress import progress_bar  # noqa: PLC0415
    from scheduler.intake import Finish  # noqa: PLC0415
    from scheduler.plan import plan  # noqa: PLC0415

    options = {name: given[name] for name in _AS_GIVEN if name != "market"}
    with progress_bar("Planning", quiet=quiet) as progress:
        result = plan(
            given["orders"],
            given["market"],
            settings=changed_settings(given["settings"], given),
            finish=[Finish.parse(text) for text in given["finish"]],
            progress=progress,
            **options,
        )
    if not quiet:
        show_notes(result.notes)
    return result
