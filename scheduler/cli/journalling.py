"""Keeping what a command made: `--journal`, `--no-journal`, and the entry in the journal.

The journal comes last. Whatever stops it, the command's own files are whole, and that is said. At a
place that somebody named the exit status is then 3, so that no script takes the entry for made; at
the default place it is a warning only.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import click

from scheduler.cli.options import apply
from scheduler.errors import HeadraceError

if TYPE_CHECKING:
    from scheduler.journal.chain import Entry
    from scheduler.journal.place import Place
    from scheduler.journal.store import Journal

NOT_KEPT = 3
"""Exit status: done and written, but not in the journal that was asked for."""


def journal_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """`--journal PLACE` and `--no-journal`."""
    made = [
        click.option(
            "--journal",
            metavar="PLACE",
            help="Keep the result there: a file or postgresql://HOST/DATABASE. "
            "[default: HEADRACE_JOURNAL, the settings, a file of the user's]",
        ),
        click.option("--no-journal", is_flag=True, help="Keep no record of this run."),
    ]
    return apply(function, made)


def journal_place(given: dict[str, Any]) -> Place | None:
    """Where the command line says to keep its result; takes its two options out of `given`.

    Raises:
        click.UsageError: both options.
        MisuseError: no address. MissingExtraError: PostgreSQL without its driver.
    """
    from scheduler.cli.options import load_settings  # noqa: PLC0415
    from scheduler.journal.databases import check_driver  # noqa: PLC0415
    from scheduler.journal.place import OFF, find_place  # noqa: PLC0415

    option, never = given.pop("journal"), given.pop("no_journal")
    if option is not None and never:
        raise click.UsageError("--journal and --no-journal exclude each other")
    settings = load_settings(given["settings"])
    place = find_place(OFF if never else option, settings.journal.place)
    if place is not None and place.is_server:
        check_driver()
    return place


def keep(place: Place | None, record: Callable[[Journal], Entry], *, quiet: bool) -> int:
    """Add an entry, and say so on standard error; `record` makes it in an open journal.

    Returns:
        The exit status: 0, or NOT_KEPT.
    """
    if place is None:
        return 0
    from scheduler.journal.store import Journal  # noqa: PLC0415

    try:
        with Journal(place) as journal:
            entry = record(journal)
    except (HeadraceError, OSError) as error:
        click.echo(f"Warning: NOT IN THE JOURNAL; the result itself is complete. {error}", err=True)
        return NOT_KEPT if place.asked_for else 0
    if not quiet:
        click.echo(f"Journal: entry {entry.number}, {entry.hash}", err=True)
    return 0
