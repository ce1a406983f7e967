"""The command ``ensemble-horizon`` and its subcommands, each loaded only when it is called."""

from __future__ import annotations

import gc
import importlib
from typing import Any

import click

# name: (module, one line of help); modules load late because numerical libraries are slow to load.
COMMANDS = {
    "survey": ("ensemble_horizon.cli.survey", "Say what is there, missing or suspect in the runs."),
    "estimate": (
        "ensemble_horizon.cli.estimate",
        "Measure spread and growth, and place the limits.",
    ),
    "brief": ("ensemble_horizon.cli.brief", "Make the briefing page and its sheet of paper."),
    "nightly": (
        "ensemble_horizon.cli.nightly",
        "All of it for the newest start: survey to briefing and archive.",
    ),
    "compare": ("ensemble_horizon.cli.compare", "Say what one version gains over another."),
    "verify": (
        "ensemble_horizon.cli.verify",
        "Score past runs against analyses and observations.",
    ),
    "reach": ("ensemble_horizon.cli.reach", "Say what a smaller initial error would buy."),
    "toy": ("ensemble_horizon.cli.toy", "List, run and measure toy systems of known limits."),
}


class LateGroup(click.Group):
    """A group whose subcommands are imported when they are called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of the work."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """The subcommand of that name, or None."""
        if cmd_name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(COMMANDS[cmd_name][0]).command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """List the subcommands without loading them."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


@click.group(cls=LateGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="ensemble-horizon")
def group() -> None:
    """Lead-time limits of ensemble forecasts: how long the runs are worth acting on.

    A horizon is a statement about a model, not a warning. Decisions that touch safety go by
    official warnings, local rules and the qualified forecaster on duty.
    """


def main(arguments: list[str] | None = None) -> Any:
    """Run the command line; the entry point of the package."""
    try:
        return group.main(args=arguments, prog_name="ensemble-horizon")
    finally:
        gc.freeze()  # the process ends: searching all loaded libraries for cycles takes its time
