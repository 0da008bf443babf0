"""`headrace console`: a local page on which settings are moved and the plan follows."""

from __future__ import annotations

from datetime import date as date_of_day
from pathlib import Path

import click

from scheduler.cli.options import (
    CAUTIONS,
    ignore_columns_option,
    load_settings,
    settings_option,
    table_options,
    when_options,
)

_PORT = 8750


@click.command(epilog=CAUTIONS)
@click.argument("orders", required=False)
@table_options(
    "market", "profiles", "readings", "exposures", "factor_covariance", "returns", "corridors"
)
@settings_option
@when_options
@ignore_columns_option
@click.option("--out", metavar="DIR", help="Let the page write a plan's files there.")
@click.option(
    "--host",
    default="127.0.0.1",
    show_default=True,
    help="Address to listen on. Any but this machine's own lets others in, so it needs a token.",
)
@click.option(
    "--port",
    type=click.IntRange(0, 65535),
    default=_PORT,
    show_default=True,
    help="Port to listen on; 0 for any that is free.",
)
@click.option(
    "--token",
    metavar="TEXT",
    help="What every browser must bring. [default: none on this machine; else one made up]",
)
@click.option("--quiet", is_flag=True, help="Say nothing but the address and errors.")
def command(
    orders: str | None,
    market: str | None,
    settings: str | None,
    date: date_of_day | None,
    at: str | None,
    ignore_columns: tuple[str, ...],
    out: str | None,
    host: str,
    port: int,
    token: str | None,
    quiet: bool,
    **tables: str | None,
) -> None:
    """A local page: move urgency, caps, times and worlds, and see the plan follow.

    Without tables it opens empty: give some on the page, or open the example.
    """
    given = {"orders": orders, "market": market, **tables}
    if any(given.values()) and (orders is None or market is None):
        raise click.UsageError("give both ORDERS and --market FILE, or no table at all")
    from scheduler.console.desk import open_desk  # noqa: PLC0415
    from scheduler.console.guard import LOOPBACK, Guard  # noqa: PLC0415
    from scheduler.console.serve import need_server, serve  # noqa: PLC0415

    need_server()
    guard = Guard.of(host, token)
    desk = None
    if orders is not None:
        rules = load_settings(settings)
        desk = open_desk(
            "tables of the command line",
            given,
            settings=rules,
            date=date,
            at=at,
            ignore_columns=ignore_columns,
        )
    if host not in LOOPBACK and not quiet:
        click.echo(
            f"Note: {host} can be reached from other machines; only browsers that open the whole "
            "address below, token included, are answered. It travels unencrypted: use a network "
            "that you trust, or a tunnel to 127.0.0.1",
            err=True,
        )
    folder = None if out is None else Path(out)
    serve(desk, host=host, port=port, guard=guard, out=folder, ready=click.echo)
    if not quiet:
        click.echo("Stopped", err=True)
