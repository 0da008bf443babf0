"""`headrace replan`: a written plan and its fills so far in, the schedule of the rest out."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from scheduler.cli.options import (
    CAUTIONS,
    finish_option,
    ignore_columns_option,
    load_settings,
    output_options,
    settings_option,
    show_notes,
    table_options,
    when_options,
)
from scheduler.cli.setting_options import setting_options, with_changes

if TYPE_CHECKING:
    from scheduler.plan import Plan
    from scheduler.replan import Replan

_TABLES = (
    "orders",
    "market",
    "profiles",
    "readings",
    "exposures",
    "factor_covariance",
    "returns",
    "corridors",
    "constraints",
    "bars",
)


@click.command(epilog=CAUTIONS)
@click.argument("plan", metavar="DIR")
@table_options("fills", *_TABLES)
@click.option("--soften", is_flag=True, help="Let corridors that cannot hold give way, least.")
@setting_options
@finish_option
@settings_option
@when_options
@ignore_columns_option
@click.option("--follow", metavar="FILE", help="A growing fills file (CSV): plan again and again.")
@click.option("--every", metavar="TIME", help="How often, with --follow: 30s, 5min, 1h.")
@click.option("--out", metavar="DIR", help="Write schedule, summary and progress there.")
@click.option("--report", is_flag=True, help="Also write replan.html and report.html.")
@output_options
def command(
    plan: str,
    fills: str | None,
    follow: str | None,
    every: str | None,
    out: str | None,
    report: bool,
    as_json: bool,
    quiet: bool,
    **given: Any,
) -> None:
    """Plan the rest of a plan anew from its fills so far, and say why it changes.

    DIR is what plan --out wrote. Own imbalance is carried over from the fills, the plan's risk
    aversion is kept unless another aim is given, and tables given here replace the plan's: orders
    as a whole, in full quantity; market and readings symbol by symbol.
    """
    _check_options(fills, follow, every, out, report=report, at=given["at"])
    if follow is not None and as_json:
        raise click.UsageError("--json is of one re-plan: leave it out, and give --follow an --out")
    from scheduler.written import read_plan  # noqa: PLC0415

    first = read_plan(plan, ignore_columns=given["ignore_columns"])
    options = _options(first, given)
    if follow is not None and every is not None:
        _follow(first, follow, every, options, out=out, report=report, quiet=quiet)
        return
    from scheduler.cli.show_replan import replan_text  # noqa: PLC0415
    from scheduler.replan import replan  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    result = replan(first, fills, at=given["at"], **options)
    if not quiet:
        show_notes(result.notes)
    if out is not None:
        result.write(out, report=report)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    elif not quiet:
        click.echo(replan_text(result))
        if out is not None:
            click.echo(f"Written to {out}", err=True)


def _check_options(
    fills: str | None,
    follow: str | None,
    every: str | None,
    out: str | None,
    *,
    report: bool,
    at: str | None,
) -> None:
    if (follow is None) != (every is None):
        raise click.UsageError("--follow FILE and --every TIME belong together")
    if follow is not None and (fills is not None or at is not None):
        raise click.UsageError("--follow takes the place of --fills and --at: leave those out")
    if report and out is None:
        raise click.UsageError("--report writes files: give a directory with --out")


def _options(first: Plan, given: dict[str, Any]) -> dict[str, Any]:
    """The keywords of `replan`; settings start from the plan's, unless a file is given."""
    from scheduler.intake import Finish  # noqa: PLC0415

    if given["date"] is not None and given["date"] != first.book.date:
        raise click.UsageError(f"the plan is for {first.book.date}; --date cannot be another")
    base = first.book.settings if given["settings"] is None else load_settings(given["settings"])
    names = (*_TABLES, "soften", "ignore_columns")
    return {
        **{name: given[name] for name in names},
        "settings": with_changes(base, given),
        "finish": [Finish.parse(text) for text in given["finish"]],
    }


def _follow(
    first: Plan,
    path: str,
    every: str,
    options: dict[str, Any],
    *,
    out: str | None,
    report: bool,
    quiet: bool,
) -> None:
    """Rounds until nothing is left or a signal asks to stop; each is written as a whole."""
    import pandas as pd  # noqa: PLC0415

    from scheduler.cli.stopping import stop_on_signals  # noqa: PLC0415
    from scheduler.errors import HeadraceError  # noqa: PLC0415
    from scheduler.follow import follow, seconds_of  # noqa: PLC0415

    pause = seconds_of(every)
    with stop_on_signals() as wait:
        for result in follow(
            first,
            path,
            every=pause,
            clock=lambda: pd.Timestamp.now(tz="UTC"),
            wait=wait,
            **options,
        ):
            if isinstance(result, HeadraceError):
                click.echo(f"Not planned anew, what was planned stands: {result}", err=True)
                continue
            if out is not None:
                result.write(out, report=report)
            if not quiet:
                click.echo(_round(result))


def _round(result: Replan) -> str:
    """One line: what is left, who is off the plan, what the whole is expected to cost."""
    total = result.summary["total"]
    off = [f"{total[state]} {state}" for state in ("ahead", "behind") if total[state]]
    now = total["changes"][-1]
    left = int((result.progress["left"] > 0.0).sum())
    words = [f"{left} of {total['orders']} orders left", *off, f"cost {now['bps']:.2f} bps"]
    return f"{result.summary['at']}: {', '.join(words)}"
