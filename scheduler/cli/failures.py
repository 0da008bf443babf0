"""The one place where an error becomes a message and an exit status."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager

import click

from scheduler.cli.options import wants_json
from scheduler.errors import HeadraceError, InputError

SHOWN = 20
"""Problems shown on screen; the rest is counted."""


@contextmanager
def failures_to_exit(ctx: click.Context) -> Iterator[None]:
    """End the command with a message instead of a traceback.

    Errors of headrace end with their own status, those of the system (a full disk, no
    permission) with 2. A closed pipe is left to click, which ends quietly.
    """
    try:
        yield
    except HeadraceError as error:
        _report(error, as_json=wants_json(ctx))
        ctx.exit(error.exit_status)
    except BrokenPipeError:
        raise
    except OSError as error:
        place = f"{error.filename}: " if error.filename else ""
        click.echo(f"Error: {place}{error.strerror or error}", err=True)
        ctx.exit(2)


def _report(error: HeadraceError, *, as_json: bool) -> None:
    if as_json:
        click.echo(json.dumps(_as_data(error), indent=2))
    problems = error.problems if isinstance(error, InputError) else ()
    if not problems:
        click.echo(f"Error: {error}", err=True)
        return
    for problem in problems[:SHOWN]:
        click.echo(str(problem), err=True)
    if len(problems) > SHOWN:
        rest = len(problems) - SHOWN
        click.echo(f"... and {rest} more; --json lists all of them", err=True)
    called = "problem" if len(problems) == 1 else "problems"
    click.echo(f"Error: {len(problems)} {called}; nothing was written", err=True)


def _as_data(error: HeadraceError) -> dict[str, object]:
    data: dict[str, object] = {
        "schema": 1,
        "error": type(error).__name__,
        "exit_status": error.exit_status,
    }
    if isinstance(error, InputError):
        return data | {"problems": [vars(problem) for problem in error.problems]}
    return data | {"message": str(error)}
