"""`headrace plan`: orders and a market in, a slice schedule out."""

from __future__ import annotations

from collections.abc import Callable
from datetime import date as date_of_day
from typing import Any

import click

from scheduler.cli.options import (
    CAUTIONS,
    ignore_columns_option,
    load_settings,
    output_options,
    settings_option,
    table_options,
    when_options,
)
from scheduler.settings import LAWS, SOLVERS, Settings

_MOST_NOTES = 20

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


@click.command(epilog=CAUTIONS)
@click.argument("orders", required=False)
@table_options(
    "market",
    "profiles",
    "readings",
    "exposures",
    "factor_covariance",
    "returns",
    "corridors",
    "constraints",
)
@click.option("--legacy", metavar="FILE", help="Holdings to start from, in place of ORDERS.")
@click.option("--target", metavar="FILE", help="Holdings to end with.")
@click.option("--soften", is_flag=True, help="Let corridors that cannot hold give way, least.")
@setting_options
@click.option(
    "--finish",
    multiple=True,
    metavar="FRACTION@TIME",
    help="At least this much by then, as in 0.9@14:30. May be repeated.",
)
@settings_option
@when_options
@ignore_columns_option
@click.option("--out", metavar="DIR", help="Write schedule and summary there; - for CSV on stdout.")
@click.option("--report", is_flag=True, help="Also write report.html, a page with charts.")
@click.option("--parquet", is_flag=True, help="Write the schedule as Parquet, not CSV.")
@output_options
def command(
    orders: str | None,
    market: str | None,
    profiles: str | None,
    readings: str | None,
    exposures: str | None,
    factor_covariance: str | None,
    returns: str | None,
    corridors: str | None,
    constraints: str | None,
    legacy: str | None,
    target: str | None,
    soften: bool,
    finish: tuple[str, ...],
    settings: str | None,
    date: date_of_day | None,
    at: str | None,
    ignore_columns: tuple[str, ...],
    out: str | None,
    report: bool,
    parquet: bool,
    as_json: bool,
    quiet: bool,
    **changed: Any,
) -> None:
    """Split parent orders over time: slices, cost, risk and how sure the optimum is.

    ORDERS is the orders table: .csv, .parquet or - for standard input; or give --legacy and
    --target holdings. Without --out the schedule is shown, not written.
    """
    if orders is None and legacy is None and target is None:
        raise click.UsageError("give the orders table, or --legacy and --target holdings")
    if market is None:
        raise click.UsageError("give the market table with --market FILE")
    if (report or parquet) and out in (None, "-"):
        raise click.UsageError("--report and --parquet write files: give a directory with --out")
    if as_json and out == "-":
        raise click.UsageError("--json and --out - both write to standard output: give one of them")
    from scheduler.cli.progress import progress_bar  # noqa: PLC0415
    from scheduler.cli.show import plan_text  # noqa: PLC0415
    from scheduler.intake import Finish  # noqa: PLC0415
    from scheduler.plan import plan  # noqa: PLC0415
    from scheduler.tables.write import to_json, write_table  # noqa: PLC0415

    with progress_bar("Planning", quiet=quiet) as progress:
        result = plan(
            orders,
            market,
            legacy=legacy,
            target=target,
            profiles=profiles,
            readings=readings,
            exposures=exposures,
            factor_covariance=factor_covariance,
            returns=returns,
            corridors=corridors,
            constraints=constraints,
            soften=soften,
            settings=_settings(settings, changed),
            date=date,
            at=at,
            finish=[Finish.parse(text) for text in finish],
            ignore_columns=ignore_columns,
            progress=progress,
        )
    if not quiet:
        for note in result.notes[:_MOST_NOTES]:
            click.echo(f"Note: {note}", err=True)
        if (more := len(result.notes) - _MOST_NOTES) > 0:
            click.echo(f"... and {more} more notes; summary.json has them all", err=True)
    if out == "-":
        write_table(result.schedule, "-")
    elif out is not None:
        result.write(out, report=report, parquet=parquet)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet and out != "-":
        click.echo(plan_text(result))
        if out is not None:
            click.echo(f"Written to {out}", err=True)


def _settings(path: str | None, changed: dict[str, Any]) -> Settings:
    """The settings of the file, with what the command line changes; one aim replaces another."""
    from scheduler.plan import AIMS  # noqa: PLC0415

    settings = load_settings(path)
    if any(changed[aim] is not None for aim in AIMS):
        settings = settings.with_unset("plan", *AIMS)
    sections = {name: section for name, section, _text in _NUMBERS}
    sections |= {"impact_law": "model", "solver": "plan"}
    for section in ("plan", "model"):
        values = {name: changed[name] for name, home in sections.items() if home == section}
        settings = settings.with_values(section, **values)
    return settings
