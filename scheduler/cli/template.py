"""`headrace template`: empty tables and a settings file to start from."""

from __future__ import annotations

from pathlib import Path

import click

from scheduler.cli.options import CAUTIONS
from scheduler.errors import MisuseError


@click.command(epilog=CAUTIONS)
@click.option("--out", metavar="DIR", required=True, help="Directory to write into.")
@click.option("--force", is_flag=True, help="Replace files that are there already.")
@click.option("--quiet", is_flag=True, help="Say nothing but errors.")
def command(out: str, force: bool, quiet: bool) -> None:
    """Write empty input tables and a settings file with every default.

    One .csv for each table, with its header; columns.csv, which says what each column means
    and what an empty cell stands for; settings.toml, where every setting stands behind a #
    with its default.
    """
    from scheduler.tables.template import template_files  # noqa: PLC0415
    from scheduler.tables.write import write_files  # noqa: PLC0415

    files = template_files()
    present = [name for name in files if (Path(out) / name).exists()]
    if present and not force:
        there = ", ".join(present)
        raise MisuseError(f"{out} already holds {there}; use --force to replace them")
    write_files(out, files)
    if not quiet:
        click.echo(f"Wrote {', '.join(files)} to {out}", err=True)
