"""The guides keep up with the program: what there is stands in the README."""

from __future__ import annotations

import re
from importlib import import_module
from pathlib import Path

import click
import pytest

from scheduler.cli import COMMANDS
from scheduler.cli.options import CAUTIONS
from scheduler.settings import LAWS
from scheduler.tables.inputs import TABLES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text()
# said once for all commands, in words
COMMON = {"--json", "--quiet", "--ignore-columns", "--settings", "--force", "--help"}


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_is_documented(name: str) -> None:
    assert f"`headrace {name}" in README


@pytest.mark.parametrize("name", COMMANDS)
def test_every_option_is_documented(name: str) -> None:
    command: click.Command = import_module(f"scheduler.cli.{name.replace('-', '_')}").command
    flags = {flag for p in command.params for flag in p.opts if flag.startswith("--")}
    tables = {f"--{table.replace('_', '-')}" for table in (*TABLES, "holdings")}
    missing = {flag for flag in flags - COMMON - tables if flag not in README}
    assert not missing


@pytest.mark.parametrize("name", TABLES)
def test_every_table_and_column_is_documented(name: str) -> None:
    assert f"| {name} |" in README
    for column in TABLES[name].TABLE.header:
        assert re.search(rf"\b{column}\b", README), column


def test_every_impact_law_is_documented() -> None:
    assert all(f"| `{law}` |" in README for law in LAWS)


def test_cautions_stand_in_the_readme() -> None:
    """The same sentence as in every help text and report."""
    text = " ".join(README.replace(">", " ").split())
    assert CAUTIONS.split(" headrace plans")[0] in text


def test_readme_commands_are_those_that_ci_runs() -> None:
    """Each of the two is marked, and names files that are there."""
    for mark in ("example", "tests"):
        assert f"<!-- run: {mark} -->\n```sh\n" in README
    for path in re.findall(r"examples/[\w./-]+", README):
        assert (ROOT / path).exists(), path
