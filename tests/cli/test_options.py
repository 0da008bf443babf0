"""Options that commands share are read strictly."""

from __future__ import annotations

import click
import pytest
from click.testing import CliRunner

from scheduler.cli.options import load_settings, when_options
from scheduler.settings import Settings


@click.command()
@when_options
def when(date, at):
    """Say what was understood."""
    click.echo(f"{date!r} {at!r}")


@pytest.mark.parametrize(
    ("args", "understood"),
    [
        ([], "None None"),
        (["--date", "2026-01-05", "--at", "9:45"], "datetime.date(2026, 1, 5) '09:45:00'"),
        (["--at", "2026-01-05T09:45-05:00"], "None '2026-01-05T09:45:00-05:00'"),
    ],
)
def test_when(args, understood):
    """A date and a canonical moment, None where not given."""
    assert CliRunner().invoke(when, args).stdout == f"{understood}\n"


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["--date", "5.1.2026"], "'5.1.2026' is no date; write it as in 2026-01-05"),
        (["--date", "2026-02-30"], "'2026-02-30' is no date"),
        (["--at", "noon"], "'noon' is no ISO 8601 time; write HH:MM"),
        (["--at", "24:00"], "'24:00' is no time of day; write a time from 00:00 to 23:59"),
    ],
)
def test_when_refused(args, message):
    """Exit status 2, with the way to write it."""
    result = CliRunner().invoke(when, args)
    assert result.exit_code == 2
    assert message in result.stderr


def test_settings_of_a_file_or_the_defaults(put):
    """No file means the defaults."""
    assert load_settings(None) == Settings()
    assert load_settings(put("s.toml", "[plan]\nbucket = 5\n")).plan.bucket == 5
