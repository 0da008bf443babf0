"""`headrace calibrate`: bars in, a market table and volume profiles out."""

from __future__ import annotations

from typing import Any

import click

from scheduler.cli.options import (
    CAUTIONS,
    ignore_columns_option,
    load_settings,
    output_options,
    settings_option,
    table_options,
)

_HEADER = ("symbol", "price", "adv", "daily vol", "overnight share", "returns", "as of")


@click.command(epilog=CAUTIONS)
@table_options("bars")
@click.option(
    "--calendar",
    metavar="MIC",
    help="Exchange calendar of all symbols (ISO 10383), or 24/7. [default: XNYS]",
)
@click.option(
    "--lookback", type=int, metavar="SESSIONS", help="Sessions looked back on. [default: 60]"
)
@settings_option
@ignore_columns_option
@click.option("--out", metavar="DIR", required=True, help="Directory to write into.")
@output_options
def command(
    bars: str | None,
    settings: str | None,
    ignore_columns: tuple[str, ...],
    out: str,
    as_json: bool,
    quiet: bool,
    **given: Any,
) -> None:
    """Estimate a market table, and volume profiles, from bars of the past.

    Writes market.csv (price, adv, daily_vol of each symbol), summary.json and, from intraday
    bars, profiles.csv. The time of a bar is its start: local exchange time, or converted if it
    has an offset.
    """
    if bars is None:
        raise click.UsageError("give the bars table with --bars FILE")
    from scheduler.calibrate import calibrate  # noqa: PLC0415
    from scheduler.cli.show import aligned  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    options = {name: value for name, value in given.items() if value is not None}
    result = calibrate(
        bars, ignore_columns=ignore_columns, settings=load_settings(settings), **options
    )
    written = result.write(out)
    if not quiet:
        for note in result.notes:
            click.echo(f"Note: {note}", err=True)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet:
        rows = [_row(symbol, row) for symbol, row in result.summary["symbols"].items()]
        click.echo(aligned(_HEADER, rows))
        click.echo(f"Wrote {', '.join(path.name for path in written)} to {out}", err=True)


def _row(symbol: str, figures: dict[str, Any]) -> tuple[str, ...]:
    share = figures["overnight_share"]
    return (
        symbol,
        f"{figures['price']:,.10g}",
        f"{figures['adv']:,.0f}",
        f"{figures['daily_vol']:.2%}",
        "" if share is None else f"{share:.0%}",
        str(figures["returns"]),
        figures["as_of"],
    )
