"""Importing the package and asking for help stay cheap."""

from __future__ import annotations

import subprocess
import sys

import pytest

import scheduler
from scheduler.cli import COMMANDS

HEAVY = (
    "pandas",
    "numpy",
    "pyarrow",
    "cvxpy",
    "scipy",
    "plotly",
    "exchange_calendars",
    "rich",
    "starlette",
    "uvicorn",
    "distributed",
)


def _loaded(code: str) -> set[str]:
    """The heavy libraries that a fresh interpreter has loaded after running the code."""
    report = f"import sys; {code}; print(*sys.modules, sep='\\n')"
    result = subprocess.run(
        [sys.executable, "-c", report], capture_output=True, text=True, check=True
    )
    assert "scheduler" in result.stdout
    return set(HEAVY) & set(result.stdout.split())


def test_import_is_light():
    """`import scheduler` loads none of the heavy libraries."""
    assert _loaded("import scheduler") == set()


@pytest.mark.parametrize("args", [["--help"], *([name, "--help"] for name in COMMANDS)])
def test_help_is_light(args):
    """The help of the group and of each command loads none of them either."""
    code = f"from scheduler.cli import main; main({args!r}, standalone_mode=False)"
    assert _loaded(code) == set()


def test_a_name_loads_what_it_needs():
    """The check above can fail: a reader loads pandas."""
    assert "pandas" in _loaded("from scheduler import read_orders")


def test_every_public_name_can_be_had():
    """`__all__` and the lazy look-up agree; other names are errors."""
    for name in scheduler.__all__:
        assert getattr(scheduler, name).__name__ == name
    assert dir(scheduler) == sorted(scheduler.__all__)
    with pytest.raises(AttributeError, match="has no attribute 'read_ordes'"):
        _ = scheduler.read_ordes
