"""`headrace check`: only read and check."""

from __future__ import annotations

from functools import partial

import click

from scheduler.cli.options import (
    CAUTIONS,
    ignore_columns_option,
    load_settings,
    output_options,
    settings_option,
    table_options,
)
from scheduler.errors import InputError, Problem
from scheduler.settings import DEFAULTS


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
    "holdings",
    "bars",
    "trades",
    "fills",
    "closes",
)
@settings_option
@ignore_columns_option
@output_options
def command(
    orders: str | None,
    settings: str | None,
    ignore_columns: tuple[str, ...],
    as_json: bool,
    quiet: bool,
    **tables: str | None,
) -> None:
    """Read and check the input tables; report every problem found.

    ORDERS is the orders table: .csv, .parquet or - for standard input. Any of the tables may
    be left out; those that are given are also checked against each other.
    """
    from scheduler.tables.inputs import gather, read_tables  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    sources = {"orders": orders, **tables}
    if settings is None and not any(source is not None for source in sources.values()):
        raise click.UsageError("give at least one table, or a settings file, to check")
    problems: list[Problem] = []
    rules = gather(problems, partial(load_settings, settings)) or DEFAULTS
    read = partial(read_tables, sources, ignore_columns=ignore_columns, settings=rules)
    result = gather(problems, read)
    if problems or result is None:
        raise InputError(problems)
    checked, notes = result
    rows = {name: len(table.frame) for name, table in checked.items()}
    if not quiet:
        for note in notes:
            click.echo(f"Note: {note}", err=True)
    if as_json:
        click.echo(to_json({"schema": 1, "rows": rows, "notes": notes, "problems": []}), nl=False)
    elif not quiet:
        click.echo(
            f"{_count(len(rows), 'table')}, {_count(sum(rows.values()), 'row')}: no problems"
        )


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
