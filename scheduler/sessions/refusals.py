"""The one way this room says no."""

from __future__ import annotations

from scheduler.errors import InputError, Problem


def refusal(source: str, column: str | None, value: object, rule: str, remedy: str) -> InputError:
    """An InputError with one problem; whoever knows the table row adds it."""
    text = None if value is None else str(value)
    return InputError([Problem(source, None, column, text, rule, remedy)])
