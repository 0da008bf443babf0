"""`headrace plan`: orders and a market in, a slice schedule out."""

from __future__ import annotations

from typing import Any

import click

from scheduler.cli.journalling import journal_options, journal_place, keep
from scheduler.cli.options import CAUTIONS, output_options
from scheduler.cli.planning import planned, planning_options


@click.command(epilog=CAUTIONS)
@planning_options
@click.option("--out", metavar="DIR", help="Write schedule and summary there; - for CSV on stdout.")
@click.option("--report", is_flag=True, help="Also write report.html, a page with charts.")
@click.option("--parquet", is_flag=True, help="Write the schedule as Parquet, not CSV.")
@journal_options
@output_options
def command(
    out: str | None, report: bool, parquet: bool, as_json: bool, quiet: bool, **given: Any
) -> None:
    """Split parent orders over time: slices, cost, risk and how sure the optimum is.

    ORDERS is the orders table: .csv, .parquet or - for standard input; or give --legacy and
    --target holdings. Without --out the schedule is shown, not written.
    """
    if (report or parquet) and out in (None, "-"):
        raise click.UsageError("--report and --parquet write files: give a directory with --out")
    if as_json and out == "-":
        raise click.UsageError("--json and --out - both write to standard output: give one of them")
    place = journal_place(given)
    result = planned(given, quiet=quiet)
    from scheduler.cli.show import plan_text  # noqa: PLC0415
    from scheduler.journal.entries import record_plan  # noqa: PLC0415
    from scheduler.tables.write import to_json, write_table  # noqa: PLC0415

    if out == "-":
        write_table(result.schedule, "-")
    elif out is not None:
        result.write(out, report=report, parquet=parquet)
    status = keep(place, lambda journal: record_plan(journal, result, parquet=parquet), quiet=quiet)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet and out != "-":
        click.echo(plan_text(result))
        if out is not None:
            click.echo(f"Written to {out}", err=True)
    click.get_current_context().exit(status)
