"""`headrace rehearse`: a plan played forward many times, and its costs held against the promise."""

from __future__ import annotations

from typing import Any

import click

from scheduler.cli.options import CAUTIONS, output_options, show_notes, table_options
from scheduler.cli.planning import planned, planning_options


@click.command(epilog=CAUTIONS)
@planning_options
@click.option("--paths", type=int, default=20_000, show_default=True, help="Paths of each case.")
@click.option("--seed", type=int, default=1, show_default=True, help="The same seed, same paths.")
@click.option(
    "--session-noise",
    type=float,
    default=0.3,
    show_default=True,
    help="Standard deviation of the log of a session's volume.",
)
@click.option(
    "--bucket-noise",
    type=float,
    default=0.4,
    show_default=True,
    help="The same of a bucket's volume within its session.",
)
@click.option(
    "--following", is_flag=True, help="Slices follow the volume that comes, not the clock."
)
@table_options("bars")
@click.option("--out", metavar="DIR", help="Write rehearsal.json there.")
@click.option("--report", is_flag=True, help="Also write rehearsal.html, a page with charts.")
@click.option("--keep-paths", is_flag=True, help="Also write every path, paths.parquet.")
@output_options
def command(
    paths: int,
    seed: int,
    session_noise: float,
    bucket_noise: float,
    following: bool,
    bars: str | None,
    out: str | None,
    report: bool,
    keep_paths: bool,
    as_json: bool,
    quiet: bool,
    **given: Any,
) -> None:
    """Play a plan forward many times: does what it promises hold?

    Takes what plan takes, plans it, and plays its schedule in the model: first with the volume as
    forecast, where the costs must have the law that the plan states, then with volume at random,
    where caps delay fills and costs move.
    """
    if (report or keep_paths) and out is None:
        raise click.UsageError("--report and --keep-paths write files: give a directory with --out")
    from scheduler.cli.progress import progress_bar  # noqa: PLC0415
    from scheduler.cli.show_rehearsal import rehearsal_text  # noqa: PLC0415
    from scheduler.rehearse import check_numbers, rehearse  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    check_numbers(paths, seed, session_noise, bucket_noise)
    plan = planned(given, quiet=quiet)

    with progress_bar("Playing", quiet=quiet) as progress:
        result = rehearse(
            plan,
            paths=paths,
            seed=seed,
            session_noise=session_noise,
            bucket_noise=bucket_noise,
            following=following,
            bars=bars,
            progress=progress,
        )
    if not quiet:
        show_notes(result.summary["notes"][len(plan.notes) :])
    if out is not None:
        result.write(out, report=report, paths=keep_paths)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet:
        click.echo(rehearsal_text(result))
        if out is not None:
            click.echo(f"Written to {out}", err=True)
