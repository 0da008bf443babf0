"""`headrace review`: a written plan and its fills in, what came of it out."""

from __future__ import annotations

import click

from scheduler.cli.options import (
    CAUTIONS,
    ignore_columns_option,
    output_options,
    show_notes,
    table_options,
)


@click.command(epilog=CAUTIONS)
@click.argument("plan", metavar="DIR")
@table_options("fills", "bars", "closes")
@click.option(
    "--false-alarms",
    type=float,
    default=0.05,
    show_default=True,
    help="Chance that anything at all is flagged where nothing is wrong.",
)
@ignore_columns_option
@click.option("--out", metavar="DIR", help="Write shortfall, groups, fills and review.json there.")
@click.option("--report", is_flag=True, help="Also write review.html, a page with charts.")
@click.option("--parquet", is_flag=True, help="Tables as Parquet, not CSV.")
@output_options
def command(
    plan: str,
    fills: str | None,
    bars: str | None,
    closes: str | None,
    false_alarms: float,
    ignore_columns: tuple[str, ...],
    out: str | None,
    report: bool,
    parquet: bool,
    as_json: bool,
    quiet: bool,
) -> None:
    """Say what came of a plan: its shortfall, split up and held against the promise.

    DIR is what plan --out wrote. The shortfall of each order is split into delay, execution,
    opportunity and explicit cost, execution into spread, the displacement that the model expects,
    the market's move and a residual; and it is held against the law that the plan promised.
    """
    if fills is None:
        raise click.UsageError("give the fills with --fills FILE")
    if (report or parquet) and out is None:
        raise click.UsageError("--report and --parquet write files: give a directory with --out")
    from scheduler.cli.show_review import review_text  # noqa: PLC0415
    from scheduler.review import review  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    result = review(
        plan,
        fills,
        bars=bars,
        closes=closes,
        false_alarms=false_alarms,
        ignore_columns=ignore_columns,
    )
    if not quiet:
        show_notes(result.notes)
    if out is not None:
        result.write(out, report=report, parquet=parquet)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet:
        click.echo(review_text(result))
        if out is not None:
            click.echo(f"Written to {out}", err=True)
