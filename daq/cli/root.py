"""The command group; each command's module is imported only when it is called."""

from __future__ import annotations

import importlib
import sys
from typing import Any

import click

from daq.errors import MidspanError

COMMANDS = {
    "demo": "Break a few simulated bars: the whole stack on a virtual frame.",
    "serve": "Serve one frame: the daemon.",
    "run": "Run a series from the terminal: the operator's session.",
    "watch": "Watch a frame; can move nothing.",
    "stop": "Stop the crosshead now.",
    "simulate": "A virtual frame on a pty or TCP port.",
    "check": "Check cards, ports and the live bench; never moves a frame unless a drill is asked for.",
    "verify": "Check a sealed record or a journal; name the first damaged block.",
    "recover": "Rebuild records from journals that a crash left behind.",
    "export": "Write a sealed record as CSV, units in the column names.",
}


class LazyGroup(click.Group):
    """Looks commands up in daq.cli.commands by name."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        if cmd_name == "stop":
            return click.Command("stop", help=COMMANDS["stop"])  # served in daq.cli.entry before click
        command: click.Command = importlib.import_module(f"daq.cli.commands.{cmd_name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))

    def invoke(self, ctx: click.Context) -> Any:
        """Every error of ours is one clear line and exit code 1."""
        try:
            return super().invoke(ctx)
        except MidspanError as error:
            for line in str(error).splitlines():
                click.echo(f"midspan: {line}", err=True)
            sys.exit(1)


@click.group(
    cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.version_option(package_name="midspan")
def midspan() -> None:
    """Data acquisition and live monitoring for three- and four-point flexure tests of brittle bars.

    Software is never the safety function: rely on the hard-wired emergency stop, the shield and your local rules.
    """
