"""midspan watch: see a frame; can move nothing."""

from __future__ import annotations

import time

import click
from rich.console import Console

from daq.cli.options import running_places
from daq.station.client import Client
from monitor.presenter import Presenter
from monitor.terminal import TerminalView


@click.command()
@click.option("--terminal", is_flag=True, help="Plain live view in the terminal (the only view so far).")
@click.option("--frame", help="Name of the frame, where several are served.")
@click.option("--seconds", type=click.FloatRange(min=0.1), help="Leave after so many seconds.")
def command(terminal: bool, frame: str | None, seconds: float | None) -> None:
    """Watch a served frame: state, load, stress, the bar, faults. Ctrl-C leaves.

    Example: midspan watch --terminal --frame kiln-lane-a
    """
    del terminal  # the window is another view of the same presenter
    until_s = time.monotonic() + seconds if seconds else float("inf")
    presenter = Presenter()
    console = Console()
    with Client(running_places(frame)) as client, TerminalView(console) as view:
        presenter.take_look(client.look(), time.monotonic())
        try:
            while time.monotonic() < until_s:
                for update in client.updates(0.2):
                    presenter.take(update, time.monotonic())
                view.show(presenter.lines(time.monotonic()), time.monotonic())
        except KeyboardInterrupt:
            return
