"""How the tests of `headrace plan` run it: in this process, on tables by name."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

from click.testing import CliRunner, Result

from scheduler.cli import main

EXAMPLES = Path(__file__).parents[2] / "examples"
WHEN = ("--date", "2026-03-05", "--at", "09:30")

Put = Callable[[str, str | bytes], str]


def run(*args: object, **options: Any) -> Result:
    """`headrace plan` with these arguments; an exception that is no exit is a failure."""
    result = CliRunner().invoke(main, ["plan", *map(str, args)], **options)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def arguments(files: dict[str, str]) -> list[str]:
    """The orders table, and the other tables by their options."""
    named = [word for key in files if key != "orders" for word in (f"--{key}", files[key])]
    return [files["orders"], *named]
