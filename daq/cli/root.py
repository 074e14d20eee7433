"""The command group; each command's module is imported only when it is called. Every error is one line and a code."""

from __future__ import annotations

import errno
import importlib
import sys
from collections.abc import Sequence
from typing import Any

import click

from daq.errors import MidspanError

COMMANDS = {
    "demo": "Break a few simulated bars: the whole stack on a virtual frame.",
    "serve": "Serve one frame: the daemon.",
    "run": "Run a series from the terminal: the operator's session.",
    "watch": "The window: watch a frame, run it with --operator, play a record.",
    "stop": "Stop the crosshead now.",
    "simulate": "A virtual frame on a pty or TCP port.",
    "check": "Check cards, ports and the live bench; moves only for a drill, and asks first.",
    "plan": "Plan a series: loads, rate, time, gates, cell, number of bars, firing order.",
    "methods": "List and show method cards, each value with its mark.",
    "verify": "Check sealed records and journals; name the first damaged block.",
    "recover": "Rebuild records from journals that a crash left behind.",
    "note": "Break note, correction, verdict or remark beside a sealed record.",
    "report": "Report a series: HTML, PDF, CSV, JSON.",
    "reduce": "Recompute sealed records from their raw bytes; list every difference.",
    "find": "Find sealed records by material, method, date, strength, modulus.",
    "export": "Write sealed records as CSV, units in the column names.",
}
FAILED, BAD_WORDS = 1, 2  # exit codes: it could not be done; the command line was not understood


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

    def main(
        self,
        args: Sequence[str] | None = None,
        prog_name: str | None = None,
        complete_var: str | None = None,
        standalone_mode: bool = True,
        **extra: Any,
    ) -> Any:
        """Every expected error leaves as one clear line a fault on standard error, never as a traceback."""
        if not standalone_mode:
            return super().main(args, prog_name, complete_var, standalone_mode=False, **extra)
        try:
            done = super().main(args, prog_name, complete_var, standalone_mode=False, **extra)
        except click.UsageError as error:
            sys.exit(say_usage(error))
        except click.ClickException as error:
            sys.exit(say(error.format_message(), error.exit_code))
        except click.Abort:
            sys.exit(say("broken off", FAILED))
        except MidspanError as error:
            sys.exit(say(str(error), FAILED))
        except OSError as error:
            if error.errno == errno.EPIPE:
                sys.exit(FAILED)  # whoever read our output has enough
            where = f"{error.filename}: " if error.filename else ""
            sys.exit(say(f"{where}{error.strerror or error}", FAILED))
        sys.exit(done if isinstance(done, int) else 0)


def say_usage(error: click.UsageError) -> int:
    """What was not understood, and where to read more."""
    path = error.ctx.command_path if error.ctx is not None else "midspan"
    what = error.format_message().rstrip(".").replace("\n", " ")
    if isinstance(error, click.NoSuchOption | click.BadParameter) or "No such command" not in what:
        return say(f"{what}; see {path} --help", BAD_WORDS, path)
    return say(f"{what}; commands are {', '.join(COMMANDS)}", BAD_WORDS, path)


def say(text: str, code: int, path: str = "midspan") -> int:
    for line in text.splitlines() or ["failed"]:
        click.echo(f"{path}: {line}", err=True)
    return code


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    no_args_is_help=False,
    invoke_without_command=True,
)
@click.version_option(package_name="midspan")
@click.pass_context
def midspan(ctx: click.Context) -> None:
    """Data acquisition and live monitoring for three- and four-point flexure tests of brittle bars.

    Software is never the safety function: rely on the hard-wired emergency stop, the shield and your local rules.
    """
    if ctx.invoked_subcommand is None:
        click.echo(ctx.get_help())
