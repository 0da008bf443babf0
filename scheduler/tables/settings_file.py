"""The settings file (TOML): one section per subject, every key optional."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

from scheduler.errors import InputError, Problem
from scheduler.settings import Settings, settings_from_dict


def read_settings(path: str | Path) -> Settings:
    """Settings of a TOML file; what it does not say is as in `Settings()`.

    Raises:
        InputError: if the file cannot be read, or with every unknown or unusable setting.
    """
    source = str(path)
    try:
        data = Path(path).read_bytes()
    except FileNotFoundError:
        raise _refusal(source, None, "there is no such file", "check the path") from None
    except OSError as error:
        rule = f"cannot be read ({error.strerror})"
        raise _refusal(source, None, rule, "check the path and its permissions") from None
    return settings_of_bytes(data, source)


def settings_of_bytes(data: bytes, source: str) -> Settings:
    """Settings of the content of a TOML file; `source` is what it is called in messages.

    Raises:
        InputError: no TOML, or with every unknown or unusable setting.
    """
    try:
        values = tomllib.loads(data.decode("utf-8-sig").replace("\r\n", "\n"))
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise _refusal(source, line, "is not UTF-8 text", "save it in UTF-8") from None
    except tomllib.TOMLDecodeError as error:
        place = re.search(r"line (\d+)", str(error))
        row = int(place[1]) if place else None
        remedy = "write `name = value` below a [section]"
        raise _refusal(source, row, f"is no well-formed TOML ({error})", remedy) from None
    except (ValueError, RecursionError):  # numbers of thousands of digits, thousands of brackets
        raise _refusal(source, None, "holds a value beyond reason", "shorten it") from None
    return settings_from_dict(values, source)


def _refusal(source: str, row: int | None, rule: str, remedy: str) -> InputError:
    return InputError([Problem(source, row, None, None, rule, remedy)])
