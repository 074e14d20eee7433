"""midspan run: the operator's session in the terminal."""

from __future__ import annotations

import os
import select
import sys
import termios
import time
import tty
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click
from rich.console import Console

from daq.cli.options import running_places
from daq.cli.session import Session
from daq.errors import MidspanError, Refused
from daq.station.client import Client
from daq.station.places import Places
from daq.station.stopline import send_stop
from daq.stream.updates import Update
from monitor.presenter import Presenter, result_text
from monitor.terminal import TerminalView

BURST_S = 0.030  # faster than a person: a gauge or scanner (job.md D1); may stop, never start
START_WINDOW_S = 2.0  # the second G must follow within this

KEYS = """keys: m call the next bar (tare)   G G start (capital, twice within 2 s)   Space/Esc STOP at any time
      r reset   L reset: I have looked at the frame   c close this run   n note   b back off   q leave"""


@click.command()
@click.argument("series", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@click.option("--frame", help="Name of the frame, where several are served.")
@click.option("--operator", help="Your name; the series card's when not given.")
@click.option("--instead", is_flag=True, help="Take the seat over from somebody whose terminal has died.")
@click.option("--sure", is_flag=True, help="The questions about the bench sheet have been looked at.")
def command(series: Path, frame: str | None, operator: str | None, instead: bool, sure: bool) -> None:
    """Run the bars of a series card, one by one, at a served frame.

    Software is not the safety function: shield shut, eyes protected, hand near the emergency stop.

    Example: midspan run demo-series.toml --frame kiln-lane-a
    """
    if not sys.stdin.isatty():
        raise MidspanError("midspan run needs a terminal for its keys; for scripts see `midspan demo`")
    places = running_places(frame)
    with Client(places) as client:
        name = operator or str(read_operator(series))
        client.sit(name, instead=instead)
        try:
            if open_series(client, series, sure):
                with TerminalView(Console()) as view, raw_keys():
                    OperatorTerminal(client, places, view).loop()
        finally:
            client.rise()


def read_operator(series: Path) -> str:
    from daq.cards.load import load_series

    return load_series(series).card.operator


def open_series(client: Client, series: Path, sure: bool) -> bool:
    """Open the series; asks what is odd and goes on only on a typed yes."""
    answer = client.do("series", path=str(series.absolute()), sure=sure)
    if not answer["questions"]:
        return True
    for question in answer["questions"]:
        click.echo(f"? {question}")
    if not click.confirm("Is all of this as it should be?", default=False):
        click.echo("Nothing was opened; correct the cards or the bench sheet first.")
        return False
    client.do("series", path=str(series.absolute()), sure=True)
    return True


@contextmanager
def raw_keys() -> Iterator[None]:
    """Keys as they are struck; the terminal is put back whatever happens."""
    descriptor = sys.stdin.fileno()
    before = termios.tcgetattr(descriptor)
    try:
        tty.setcbreak(descriptor)
        yield
    finally:
        termios.tcsetattr(descriptor, termios.TCSADRAIN, before)


class OperatorTerminal:
    """Keys in, requests out. Enter does nothing; a burst of characters may stop the frame, never move it."""

    def __init__(self, client: Client, places: Places, view: TerminalView) -> None:
        self._client = client
        self._places = places
        self._view = view
        self._presenter = Presenter()
        self._presenter.take_look(client.look(), time.monotonic())
        self._session = Session(client, self._on_update)
        self._armed_s = float("-inf")
        self._struck_s = float("-inf")
        self._leave = False

    def loop(self) -> None:
        self._view.say(KEYS)
        while not self._leave:
            self._session.pump(0.05)
            if select.select([sys.stdin], [], [], 0)[0]:
                self._keys(os.read(sys.stdin.fileno(), 256).decode("utf-8", "ignore"))

    def _on_update(self, update: Update | None) -> None:
        now_s = time.monotonic()
        if update is not None:
            self._presenter.take(update, now_s)
            if update.kind == "result":
                self._view.say(result_text(self._presenter.results[-1]))
        self._view.show(self._presenter.lines(now_s), now_s)

    def _keys(self, struck: str) -> None:
        now_s = time.monotonic()
        if " " in struck or "\x1b" in struck:
            if not send_stop(self._places.frame, "operator's key"):
                self._view.say("NO ANSWER - USE THE EMERGENCY STOP AT THE MACHINE")
            return
        burst = len(struck) > 1 or now_s - self._struck_s < BURST_S
        self._struck_s = now_s
        if burst:
            self._armed_s = float("-inf")
            return
        try:
            self._one(struck, now_s)
        except (Refused, MidspanError) as error:
            self._view.say(str(error))

    def _one(self, key: str, now_s: float) -> None:
        words: dict[str, tuple[str, dict[str, Any]]] = {
            "m": ("mount", {}),
            "r": ("reset", {}),
            "L": ("reset", {"looked": True}),
            "c": ("close", {"reason": "closed by the operator"}),
            "n": ("note", {"text": "operator's mark"}),
            "b": ("return", {"distance_mm": 2.0, "speed_mm_min": 20.0}),
        }
        if key == "G":
            if now_s - self._armed_s < START_WINDOW_S:
                self._armed_s = float("-inf")
                self._client.do("start")
            else:
                self._armed_s = now_s
        elif key == "q":
            self._leave = True
        elif key in words:
            name, fields = words[key]
            self._client.do(name, **fields)
