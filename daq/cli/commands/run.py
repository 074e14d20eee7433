"""midspan run: the operator's session in the terminal."""

from __future__ import annotations

import sys
from pathlib import Path

import click
from rich.console import Console

from daq.cards.load import load_series
from daq.cli.keys import Keyboard, struck_keys
from daq.cli.operator import OperatorTerminal, Seated, signals_to
from daq.cli.options import running_places
from daq.errors import MidspanError
from daq.station.client import Client
from daq.station.stopline import stop_frame
from monitor.terminal import TerminalView


@click.command()
@click.argument("series", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--frame", help="Name of the frame, where several are served.")
@click.option("--operator", help="Your name; the series card's when not given.")
@click.option("--instead", is_flag=True, help="Take the seat over from somebody whose terminal has died.")
@click.option("--sure", is_flag=True, help="The questions about the bench sheet have been looked at.")
def command(series: Path, frame: str | None, operator: str | None, instead: bool, sure: bool) -> None:
    """Run the bars of a series card, one by one, at a served frame.

    \b
    m    call the next bar: tare, then ready        G O  start (two keys within 2 s)
    Space, Esc  STOP, at any time                   B O  back off
    r    reset                                      L    reset: I have looked at the frame
    C    close this run as interrupted              1-9  note, time-stamped
    q    leave                                      ?    these keys

    Enter does nothing. A burst of characters (gauge, scanner, paste) can stop the frame, never move it.
    Software is not the safety function: shield shut, eyes protected, hand near the emergency stop.

    Example: midspan run demo-series.toml --frame kiln-lane-a
    """
    if not sys.stdin.isatty():
        raise MidspanError("midspan run needs a terminal for its keys; for scripts see `midspan demo`")
    card = load_series(series).card
    places = running_places(frame)
    with Client(places) as client:
        seated = Seated(client, operator or card.operator, series.absolute())
        client.sit(seated.name, instead=instead)
        try:
            if open_series(seated, sure):
                run_terminal(seated, places.frame)
        finally:
            click.echo(seated.rise())


def open_series(seated: Seated, sure: bool) -> bool:
    """Open the series; asks what is odd and goes on only on a typed yes."""
    questions = seated.open_series(sure=sure)
    for question in questions:
        click.echo(f"? {question}")
    if questions and not click.confirm("Is all of this as it should be?", default=False):
        click.echo("Nothing was opened; correct the cards or the bench sheet first.")
        return False
    if questions:
        seated.open_series(sure=True)
    return True


def run_terminal(seated: Seated, frame: str) -> None:
    with TerminalView(Console()) as view, struck_keys() as descriptor:
        keyboard = Keyboard(descriptor, lambda who: stop_frame(frame, who))
        terminal = OperatorTerminal(seated, keyboard, view)
        with signals_to(terminal.leave_now):
            keyboard.start()
            try:
                terminal.loop()
            finally:
                keyboard.end()
