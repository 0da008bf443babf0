"""`headrace calibrate`: bars, trades and own fills in; market, readings and settings out."""

from __future__ import annotations

from typing import Any

import click

from scheduler.cli.options import (
    CAUTIONS,
    ignore_columns_option,
    load_settings,
    output_options,
    settings_option,
    show_notes,
    table_options,
)

_SYMBOLS = ("symbol", "price", "adv", "daily vol", "overnight share", "returns", "as of")
_TAPES = ("symbol", "trades", "by quote", "by tick", "unsigned", "last reading")
_SETTINGS = ("setting", "estimate", "95 % from", "to", "default", "told apart")


@click.command(epilog=CAUTIONS)
@table_options("bars", "trades", "fills", "orders", "market", "profiles")
@click.option(
    "--calendar",
    metavar="MIC",
    help="Exchange calendar of all symbols of bars (ISO 10383), or 24/7. [default: XNYS]",
)
@click.option(
    "--lookback", type=int, metavar="SESSIONS", help="Sessions looked back on. [default: 60]"
)
@settings_option
@ignore_columns_option
@click.option("--out", metavar="DIR", required=True, help="Directory to write into.")
@output_options
def command(
    settings: str | None,
    ignore_columns: tuple[str, ...],
    out: str,
    as_json: bool,
    quiet: bool,
    **given: Any,
) -> None:
    """Estimate a market table, readings and settings from the past.

    From bars come market.csv (price, adv, daily_vol of each symbol), profiles.csv (if they are
    intraday) and the energy levels; from trades readings.csv, tests of the model and the reading
    weight; from fills with their orders the impact law. settings.toml sets what the data tell
    from its default, ready for plan; estimates.json has every estimate with its interval. Trades
    and fills take price, adv and daily_vol from --market, else from the bars; trades alone make
    bars, too. The time of a bar is its start: local exchange time, or converted if it has an
    offset.
    """
    from scheduler.calibrate import calibrate  # noqa: PLC0415
    from scheduler.tables.write import to_json  # noqa: PLC0415

    options = {name: value for name, value in given.items() if value is not None}
    if not {"bars", "trades", "fills"} & set(options):
        raise click.UsageError("give --bars FILE, --trades FILE, or --fills FILE with --orders")
    result = calibrate(ignore_columns=ignore_columns, settings=load_settings(settings), **options)
    written = result.write(out)
    if not quiet:
        show_notes(result.notes)
    if as_json:
        click.echo(to_json({**result.summary, "estimates": result.estimates}), nl=False)
    elif not quiet:
        _show(result.summary["symbols"], result.estimates)
        click.echo(f"Wrote {', '.join(path.name for path in written)} to {out}", err=True)


def _show(symbols: dict[str, Any], estimates: dict[str, Any]) -> None:
    """Tables of what was found, each where there is any, with a line between."""
    from scheduler.cli.show import aligned  # noqa: PLC0415

    tapes = (estimates["tapes"] or {}).get("symbols", {})
    parts = (
        (_SYMBOLS, [_symbol(name, row) for name, row in symbols.items()]),
        (_TAPES, [_tape(name, row) for name, row in tapes.items()]),
        (_SETTINGS, [_setting(name, row) for name, row in estimates["settings"].items()]),
    )
    if shown := [aligned(header, rows) for header, rows in parts if rows]:
        click.echo("\n\n".join(shown))


def _symbol(symbol: str, figures: dict[str, Any]) -> tuple[str, ...]:
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


def _tape(symbol: str, figures: dict[str, Any]) -> tuple[str, ...]:
    signed, last = figures["signed"], figures["last_reading"]
    return (
        symbol,
        f"{figures['trades']:,}",
        *(f"{signed[way]:.0%}" for way in ("by_quote", "by_tick", "unsigned")),
        "" if last is None else f"{last:+.2f}",
    )


def _setting(name: str, found: dict[str, Any]) -> tuple[str, ...]:
    numbers = (found["value"], *found["interval"], found["default"])
    return (name, *(f"{number:.4g}" for number in numbers), "yes" if found["told_apart"] else "no")
