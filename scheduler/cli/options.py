"""Options that commands share, each written once."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from datetime import date, datetime
from functools import reduce
from typing import Any, TypeVar

import click

from scheduler.settings import DEFAULTS, Settings

Function = TypeVar("Function", bound=Callable[..., Any])

CAUTIONS = (
    "Estimates, not advice. Best-execution duties, pre-trade risk controls and local market "
    "rules (participation, short sale, auctions, halts) come first, and a licensed person "
    "decides. headrace plans and analyses; it never sends an order."
)
"""Closes the help of every command."""

_JSON = "scheduler.json"
_MOST_NOTES = 20


def table_options(*names: str) -> Callable[[Function], Function]:
    """`--market FILE` and the like for each table named."""
    made = [
        click.option(
            f"--{name.replace('_', '-')}",
            metavar="FILE",
            help=f"The {name} table: .csv, .parquet or -.",
        )
        for name in names
    ]
    return lambda function: apply(function, made)


def settings_option(function: Function) -> Function:
    """`--settings FILE`, to be read by `load_settings`."""
    option = click.option("--settings", metavar="FILE", help="A settings file (TOML).")
    return apply(function, [option])


def load_settings(path: str | None) -> Settings:
    """The settings of a file, or the defaults without one."""
    from scheduler.tables.settings_file import read_settings  # noqa: PLC0415

    return DEFAULTS if path is None else read_settings(path)


def ignore_columns_option(function: Function) -> Function:
    """`--ignore-columns a,b`, given to the command as a tuple."""
    option = click.option(
        "--ignore-columns",
        metavar="NAMES",
        default="",
        callback=lambda _ctx, _param, text: tuple(part for part in text.split(",") if part),
        help="Unknown columns to pass over, as in a,b; '*' for all.",
    )
    return apply(function, [option])


def finish_option(function: Function) -> Function:
    """`--finish 0.9@14:30`, given to the command as a tuple of texts."""
    option = click.option(
        "--finish",
        multiple=True,
        metavar="FRACTION@TIME",
        help="At least this much by then, as in 0.9@14:30. May be repeated.",
    )
    return apply(function, [option])


def show_notes(notes: Sequence[str]) -> None:
    """Notes on standard error, the first of them where there are many."""
    for note in notes[:_MOST_NOTES]:
        click.echo(f"Note: {note}", err=True)
    if (more := len(notes) - _MOST_NOTES) > 0:
        click.echo(f"... and {more} more notes; --json has them all", err=True)


def output_options(function: Function) -> Function:
    """`--json` and `--quiet`."""
    made = [
        click.option(
            "--json",
            "as_json",
            is_flag=True,
            is_eager=True,
            callback=_remember_json,
            help="Print a machine-readable summary, or every problem found.",
        ),
        click.option("--quiet", is_flag=True, help="Say nothing but errors."),
    ]
    return apply(function, made)


def when_options(function: Function) -> Function:
    """`--date`, given as a date, and `--at`, given as the canonical text of a moment."""
    made = [
        click.option(
            "--date",
            "date",
            metavar="DATE",
            callback=_read_date,
            help="The session planned for, as in 2026-01-05. [default: the current or next one]",
        ),
        click.option(
            "--at",
            metavar="TIME",
            callback=_read_moment,
            help="The planning time. [default: now, or the open if that is later]",
        ),
    ]
    return apply(function, made)


def wants_json(ctx: click.Context) -> bool:
    """Whether the command under way was given --json."""
    return bool(ctx.meta.get(_JSON, False))


def apply(function: Function, decorators: Sequence[Callable[[Any], Any]]) -> Function:
    return reduce(lambda made, decorate: decorate(made), reversed(decorators), function)


def _remember_json(ctx: click.Context, _param: click.Parameter, value: bool) -> bool:
    ctx.meta[_JSON] = value
    return value


def _read_date(_ctx: click.Context, _param: click.Parameter, text: str | None) -> date | None:
    if text is None:
        return None
    try:
        return datetime.strptime(text, "%Y-%m-%d").date()
    except ValueError:
        raise click.BadParameter(f"{text!r} is no date; write it as in 2026-01-05") from None


def _read_moment(_ctx: click.Context, _param: click.Parameter, text: str | None) -> str | None:
    if text is None:
        return None
    from scheduler.tables.cells import CellError  # noqa: PLC0415
    from scheduler.tables.times import moment  # noqa: PLC0415

    try:
        return moment(text)
    except CellError as error:
        raise click.BadParameter(f"{text!r} {error.rule}; {error.remedy}") from None
