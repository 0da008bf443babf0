"""`headrace journal`: what was kept, in six commands."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import click

from scheduler.cli.options import CAUTIONS, apply, load_settings, output_options, settings_option
from scheduler.errors import MisuseError

if TYPE_CHECKING:
    from scheduler.journal.store import Journal


@click.group(epilog=CAUTIONS)
def command() -> None:
    """List, show, compare, verify, export or make again the plans that were kept.

    The journal is append-only. ENTRY is a number, `last`, or the beginning of an entry's hash.
    Nothing here changes an entry; none is ever taken out.
    """


def _place_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """Which journal: `--journal`, or where `--settings` say."""
    journal = click.option(
        "--journal",
        metavar="PLACE",
        help="A file or postgresql://HOST/DATABASE. "
        "[default: HEADRACE_JOURNAL, the settings, a file of the user's]",
    )
    return apply(function, [journal, settings_option])


def _open(place: str | None, settings: str | None) -> Journal:
    """The journal for reading."""
    from scheduler.journal.place import find_place  # noqa: PLC0415
    from scheduler.journal.store import Journal  # noqa: PLC0415

    found = find_place(place, load_settings(settings).journal.place)
    if found is None:
        raise MisuseError("the journal is off; name one with --journal PLACE")
    return Journal(found, write=False)


@command.command("list", epilog=CAUTIONS)
@_place_options
@click.option("--newest", type=click.IntRange(1), default=20, show_default=True, metavar="N")
@click.option("--all", "every", is_flag=True, help="All entries.")
@click.option("--kind", metavar="VERB", help="Only entries of one verb, as in plan.")
@output_options
def list_entries(
    journal: str | None,
    settings: str | None,
    newest: int,
    every: bool,
    kind: str | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """The newest entries, and how much the journal holds since when."""
    from scheduler.cli.show_journal import listing, size_text  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    with _open(journal, settings) as opened:
        entries = opened.entries(None if every else newest, kind)
        size = opened.size()
        if as_json:
            rows = [entry._asdict() for entry in entries]
            data = {"schema": 1, "place": str(opened.place), **vars(size), "rows": rows}
            click.echo(to_json(data), nl=False)
            return
        if not quiet:
            click.echo(listing(entries))
            click.echo(size_text(opened.place, size), err=True)


@command.command("show", epilog=CAUTIONS)
@click.argument("entry")
@_place_options
@output_options
def show(entry: str, journal: str | None, settings: str | None, as_json: bool, quiet: bool) -> None:
    """One entry: what was read, asked, settled and written, with the hash of each file."""
    from scheduler.cli.show_journal import entry_text  # noqa: PLC0415
    from scheduler.journal.reading import manifest_of  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    with _open(journal, settings) as opened:
        found = opened.entry(entry)
        manifest = manifest_of(opened, found)
    if as_json:
        click.echo(to_json({"schema": 1, **found._asdict(), "manifest": manifest}), nl=False)
    elif not quiet:
        click.echo(entry_text(found, manifest))


@command.command("compare", epilog=CAUTIONS)
@click.argument("one", metavar="ENTRY")
@click.argument("other", metavar="ENTRY")
@_place_options
@output_options
def compare_entries(
    one: str, other: str, journal: str | None, settings: str | None, as_json: bool, quiet: bool
) -> None:
    """Two entries beside each other: settings, inputs, figures, and shares that moved."""
    from scheduler.cli.show_journal import comparison_text  # noqa: PLC0415
    from scheduler.journal.compare import compare  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    with _open(journal, settings) as opened:
        found = compare(opened, one, other)
    if as_json:
        click.echo(to_json(found), nl=False)
    elif not quiet:
        click.echo(comparison_text(found))


@command.command("verify", epilog=CAUTIONS)
@_place_options
@click.option("--head", metavar="HASH", help="A hash noted when it was the last; must be there.")
@output_options
def verify_journal(
    journal: str | None, settings: str | None, head: str | None, as_json: bool, quiet: bool
) -> None:
    """Compute every hash anew. Exit status 1 if anything was changed or is missing.

    One change stays unseen: somebody may write every entry from one on anew, or take the last ones
    out. Against that, note the head elsewhere and give it with --head.
    """
    from scheduler.journal.verify import verify  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    with _open(journal, settings) as opened:
        verdict = verify(opened, head=head)
    if as_json:
        click.echo(to_json({"schema": 1, "sound": verdict.sound, **vars(verdict)}), nl=False)
    for problem in verdict.problems:
        click.echo(problem, err=True)
    if not verdict.sound:
        click.echo(f"Error: {opened.place} is not as it was written", err=True)
        click.get_current_context().exit(1)
    if not (quiet or as_json):
        click.echo(f"{verdict.entries} entries, unchanged; head {verdict.head}")


@command.command("export", epilog=CAUTIONS)
@click.argument("entry")
@click.option("--out", metavar="DIR", required=True, help="Directory to write into.")
@_place_options
@click.option("--quiet", is_flag=True, help="Say nothing but errors.")
def export(entry: str, out: str, journal: str | None, settings: str | None, quiet: bool) -> None:
    """Write an entry's files as they were: tables read, files written, and entry.json."""
    from scheduler.journal.reading import exported  # noqa: PLC0415
    from scheduler.tables.write import write_files  # noqa: PLC0415

    with _open(journal, settings) as opened:
        files = exported(opened, opened.entry(entry))
    write_files(out, files)
    if not quiet:
        click.echo(f"Wrote {', '.join(files)} to {out}", err=True)


@command.command("reproduce", epilog=CAUTIONS)
@click.argument("entry")
@click.option("--out", metavar="DIR", help="Write the plan made again there.")
@_place_options
@output_options
def reproduce_plan(
    entry: str,
    out: str | None,
    journal: str | None,
    settings: str | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Plan again from an entry. Exit status 1 if it is not the plan that was kept.

    Shares must be identical and every other figure equal at ten digits, which holds on the same
    machine with the same versions; where those differ, they are listed.
    """
    from scheduler.cli.show_journal import reproduction_text  # noqa: PLC0415
    from scheduler.journal.reproduce import reproduce  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    with _open(journal, settings) as opened:
        found = reproduce(opened, entry)
    if out is not None:
        found.plan.write(out)
    if as_json:
        parts = ("same", "differences", "elsewhere")
        data = {"schema": 1, "entry": found.entry.number}
        click.echo(to_json(data | {name: getattr(found, name) for name in parts}), nl=False)
    elif not quiet or not found.same:
        click.echo(reproduction_text(found), err=not found.same)
    if not found.same:
        click.get_current_context().exit(1)
