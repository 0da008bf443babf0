"""The command line: a group that loads a command's module when the command is asked for."""

from __future__ import annotations

import os
from importlib import import_module
from typing import Any

import click

from scheduler.cli.failures import failures_to_exit
from scheduler.cli.options import CAUTIONS

COMMANDS = {
    "plan": "Split parent orders over time: slices, cost, risk and how sure the optimum is.",
    "what-if": "The same orders over a grid of choices and worlds: frontier, knee, regret.",
    "replan": "Plan the rest of a plan anew from its fills so far, and say why it changes.",
    "rehearse": "Play a plan forward many times: does what it promises hold?",
    "review": "Say what came of a plan: its shortfall, split up and held against the promise.",
    "console": "A local page: move urgency, caps, times and worlds, and see the plan follow.",
    "calibrate": "Estimate a market table, readings and settings from the past.",
    "journal": "List, show, compare, verify, export or make again the plans that were kept.",
    "check": "Read and check the input tables; report every problem found.",
    "template": "Write empty input tables and a settings file with every default.",
}
"""Each command and its one-line help, so that listing them loads none of them."""


class LazyGroup(click.Group):
    """The commands of `COMMANDS`, each in the module of its name."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """The commands in the order of their listing."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Load the module of a command."""
        if cmd_name not in COMMANDS:
            return None
        module = import_module(f"{__name__}.{cmd_name.replace('-', '_')}")
        command: click.Command = module.command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """List the commands without loading them."""
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command; every failure that is not a bug becomes message and exit status."""
        with failures_to_exit(ctx):
            return super().invoke(ctx)


@click.group(cls=LazyGroup, epilog=CAUTIONS, context_settings={"max_content_width": 100})
@click.version_option(package_name="headrace", prog_name="headrace")
def main() -> None:
    """Plan how to spread parent orders over time, where only the imbalance moves the price."""
    # many small factorisations: threads that spin for each other cost more than they give
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
