"""midspan watch: see a frame; can move nothing."""

from __future__ import annotations

import time

import click
from rich.console import Console

from daq.cli.options import running_places
from daq.station.client import Client
from monitor.presenter import Presenter
from monitor.terminal import TerminalView

UPDATES_WAIT_S = 0.1


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
                for update in client.updates(UPDATES_WAIT_S):
                    presenter.take(update, time.monotonic())
                presenter.lost_updates = client.lost_updates
                now_s = time.monotonic()
                if view.due(now_s):
                    view.show(presenter.lines(now_s), now_s)
        except KeyboardInterrupt:
            return
