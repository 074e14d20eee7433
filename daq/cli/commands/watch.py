"""midspan watch: see a frame or a record; with --operator the operator's window. A stop is always possible."""

from __future__ import annotations

import re
import time
from pathlib import Path

import click
from rich.console import Console

from daq.cli.options import running_places
from daq.station.client import Client
from monitor.presenter import Presenter
from monitor.terminal import TerminalView

UPDATES_WAIT_S = 0.1
SIDE_PX_MIN, SIDE_PX_MAX = 320, 8192


def size_of(context: click.Context, option: click.Parameter, text: str) -> tuple[int, int]:
    """1920x1080 -> (1920, 1080)."""
    del context, option
    found = re.fullmatch(r"([0-9]{2,5})x([0-9]{2,5})", text)
    sides = (int(found[1]), int(found[2])) if found else (0, 0)
    if not all(SIDE_PX_MIN <= side <= SIDE_PX_MAX for side in sides):
        raise click.BadParameter(f"{text!r}: width x height in pixels, each {SIDE_PX_MIN} to {SIDE_PX_MAX}")
    return sides


@click.command()
@click.argument("record", type=click.Path(dir_okay=False, path_type=Path), required=False)
@click.option("--frame", help="Name of the frame, where several are served.")
@click.option(
    "--operator", default="", help="Your name: take the operator's seat. Without it: watching only."
)
@click.option(
    "--series", type=click.Path(dir_okay=False, path_type=Path), help="Series card to open, with --operator."
)
@click.option("--instead", is_flag=True, help="Take the seat over from somebody whose window has died.")
@click.option("--terminal", is_flag=True, help="Plain live view in the terminal instead of the window.")
@click.option(
    "--theme", type=click.Choice(["dark", "bright"]), default="dark", show_default=True, help="Colours."
)
@click.option(
    "--pixel-mm", type=click.FloatRange(0.05, 1.0), help="Height of a pixel, mm; else what the screen tells."
)
@click.option("--stress-first", is_flag=True, help="The stress is the large number, not the load (key s).")
@click.option(
    "--verdict-first", is_flag=True, help="No strength on this screen before the bar's verdict is given."
)
@click.option(
    "--tones", is_flag=True, help="Beeps: 1 seated, 2 caution, 3 break, again and again at a fault."
)
@click.option("--pedal-stop", default="", help="Key that a pedal sends for STOP, such as F9.")
@click.option("--pedal-start", default="", help="Key that a pedal sends for start, held 0.3 s, such as F10.")
@click.option(
    "--picture", type=click.Path(dir_okay=False, path_type=Path), help="Write the view of RECORD as PNG."
)
@click.option(
    "--at", "at_s", type=float, help="Moment of the picture, s since the run was opened; else its end."
)
@click.option(
    "--size", default="1920x1080", show_default=True, callback=size_of, help="Of the picture, pixels."
)
@click.option("--seconds", type=click.FloatRange(min=0.1), help="Leave after so many seconds.")
def command(
    record: Path | None,
    frame: str | None,
    operator: str,
    series: Path | None,
    instead: bool,
    terminal: bool,
    theme: str,
    pixel_mm: float | None,
    stress_first: bool,
    verdict_first: bool,
    tones: bool,
    pedal_stop: str,
    pedal_start: str,
    picture: Path | None,
    at_s: float | None,
    size: tuple[int, int],
    seconds: float | None,
) -> None:
    """Watch a served frame in the window, or play a sealed RECORD in the same view.

    Esc and Space (and the pedal) stop the frame at any time; `?` lists the keys. Only --operator can move it, and only
    by a key that is held. Software is not the safety function: hand near the emergency stop.

    Example: midspan watch --operator "A. Person" --series alumina-series.toml
    """
    if picture is not None and record is None:
        raise click.UsageError("--picture needs a RECORD")
    if series is not None and not operator:
        raise click.UsageError("--series is opened by whoever has the seat: add --operator NAME")
    if terminal:
        if record is not None or operator:
            raise click.UsageError(
                "--terminal watches a served frame; for the operator's keys there: midspan run"
            )
        watch_terminal(frame, seconds)
        return
    from monitor.setting import Setting

    setting = Setting(
        theme=theme,
        pixel_mm=pixel_mm,
        stress_first=stress_first,
        verdict_first=verdict_first,
        tones=tones,
        pedal_stop=pedal_stop,
        pedal_start=pedal_start,
    )
    from daq.cli import window

    if record is None:
        window.watch_frame(running_places(frame), window.Person(operator, series, instead), setting, seconds)
    elif picture is not None:
        window.picture(record, picture, setting, size, at_s)
    else:
        window.replay(record, setting, seconds)


def watch_terminal(frame: str | None, seconds: float | None) -> None:
    """The presenter's lines, redrawn in place. Ctrl-C leaves."""
    until_s = time.monotonic() + seconds if seconds else float("inf")
    presenter = Presenter()
    with Client(running_places(frame)) as client, TerminalView(Console()) as view:
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
