"""`headrace what-if`: the same orders over a grid of choices and worlds."""

from __future__ import annotations

from datetime import date as date_of_day
from typing import Any

import click

from scheduler.cli.options import (
    CAUTIONS,
    finish_option,
    ignore_columns_option,
    output_options,
    settings_option,
    show_notes,
    table_options,
    when_options,
)
from scheduler.cli.setting_options import changed_settings, setting_options


@click.command(epilog=CAUTIONS)
@click.argument("orders")
@table_options(
    "market", "profiles", "readings", "exposures", "factor_covariance", "returns", "corridors"
)
@click.option(
    "--vary",
    multiple=True,
    required=True,
    metavar="AXIS=VALUES",
    help="Values of one axis, as in volume=0.5,1,2 or urgency=0,0.01:10:20 (first:last:count). "
    "May be repeated: every combination is solved. Axes: urgency, risk_aversion, "
    "max_participation, start, end, bucket (choices); volume, volatility, reading, impact_law, "
    "feedback, relaxation (worlds).",
)
@setting_options
@finish_option
@settings_option
@when_options
@ignore_columns_option
@click.option(
    "--out",
    metavar="DIR",
    help="Write the table and the summary there, each part as soon as it is finished; a run that "
    "was stopped goes on from there. - for CSV on stdout.",
)
@click.option("--fresh", is_flag=True, help="Start anew, whatever parts there are in --out.")
@click.option(
    "--workers",
    type=int,
    metavar="N",
    help="Solve by N processes of this machine (extra `cluster`).",
)
@click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Solve by the workers of a Dask cluster, by the address of its scheduler, as in "
    "tcp://10.0.0.5:8786.",
)
@click.option("--report", is_flag=True, help="Also write report.html, a page with charts.")
@click.option("--parquet", is_flag=True, help="Write the table as Parquet, not CSV.")
@output_options
def command(
    orders: str,
    market: str | None,
    profiles: str | None,
    readings: str | None,
    exposures: str | None,
    factor_covariance: str | None,
    returns: str | None,
    corridors: str | None,
    vary: tuple[str, ...],
    settings: str | None,
    date: date_of_day | None,
    at: str | None,
    finish: tuple[str, ...],
    ignore_columns: tuple[str, ...],
    out: str | None,
    fresh: bool,
    workers: int | None,
    cluster: str | None,
    report: bool,
    parquet: bool,
    as_json: bool,
    quiet: bool,
    **changed: Any,
) -> None:
    """The same orders over a grid of choices and worlds: frontier, knee, regret.

    ORDERS is the orders table: .csv, .parquet or - for standard input. World axes are what nobody
    chooses: there the regret says what the base's schedule loses against one made for that world.
    """
    if market is None:
        raise click.UsageError("give the market table with --market FILE")
    if (report or parquet or fresh) and out in (None, "-"):
        raise click.UsageError(
            "--report, --parquet and --fresh are about files: give a directory with --out"
        )
    if as_json and out == "-":
        raise click.UsageError("--json and --out - both write to standard output: give one of them")
    from scheduler.cli.progress import progress_bar  # noqa: PLC0415
    from scheduler.cli.show_what_if import what_if_text  # noqa: PLC0415
    from scheduler.scenarios import read_vary  # noqa: PLC0415
    from scheduler.tables.write import to_json, write_table  # noqa: PLC0415
    from scheduler.what_if import what_if  # noqa: PLC0415

    folder = None if out in (None, "-") else out
    try:
        with progress_bar("Solving", quiet=quiet) as progress:
            result = what_if(
                orders,
                market,
                grid=read_vary(vary),
                profiles=profiles,
                readings=readings,
                exposures=exposures,
                factor_covariance=factor_covariance,
                returns=returns,
                corridors=corridors,
                settings=changed_settings(settings, changed),
                date=date,
                at=at,
                finish=finish,
                ignore_columns=ignore_columns,
                out=folder,
                fresh=fresh,
                workers=workers,
                cluster=cluster,
                progress=progress,
            )
    except KeyboardInterrupt:
        if folder is not None and not quiet:
            click.echo(
                f"Stopped; the parts finished so far are kept in {folder}: the same command goes "
                "on from there",
                err=True,
            )
        raise
    if folder is not None:
        result.write(folder, report=report, parquet=parquet)
    if not quiet:
        show_notes(result.notes)
    if out == "-":
        write_table(result.scenarios, "-")
    elif as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet:
        click.echo(what_if_text(result))
    if folder is not None and not quiet:
        click.echo(f"Written to {folder}", err=True)
