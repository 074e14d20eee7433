"""midspan serve: the daemon of one frame."""

from __future__ import annotations

import datetime as dt
import signal
import time
from pathlib import Path

import click

from daq.cards.cautions import cautions
from daq.cards.load import load_frame
from daq.cli.options import DATA, FRAME_CARD
from daq.station.places import places_for
from daq.station.supervisor import Outfit, Supervisor


@click.command()
@FRAME_CARD
@DATA
@click.option(
    "--copy-to",
    type=click.Path(file_okay=False, exists=True, path_type=Path),
    help="Folder (a lab share) that gets a verified copy of each record as it is sealed.",
)
@click.option("--no-fifo", is_flag=True, help="Do not ask for real-time scheduling.")
def command(frame_card: Path, data: Path, copy_to: Path | None, no_fifo: bool) -> None:
    """Serve the frame of FRAME_CARD until Ctrl-C or SIGTERM.

    Nothing moves until an operator sits down (midspan run) and starts a bar. After an unclean end the state is
    "unknown - look at the frame" and nothing moves before an operator has looked.

    Example: midspan serve kiln-lane-a.toml --data records
    """
    frame = load_frame(frame_card)
    ended: list[int] = []
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, lambda got, _: ended.append(got))
    for caution in cautions(frame, today=dt.date.today()):
        say(f"! {caution}")
    outfit = Outfit(
        frame, places_for(frame.name, data), fifo=not no_fifo, copy_to=str(copy_to) if copy_to else None
    )
    with Supervisor(outfit, say) as supervisor:
        word = (
            ""
            if supervisor.clean_start
            else "; THE LAST END WAS UNCLEAN: look at the frame (midspan run, key L)"
        )
        mark = " (simulated)" if frame.simulated else ""
        say(f"{frame.name}{mark}: ready; records go to {data.absolute()}{word}")
        code = supervisor.wait(lambda: bool(ended))
        begun_s = time.monotonic()
        say(f"{signal.Signals(ended[0]).name}: ending" if ended else "ending")
    say(supervisor.farewell(time.monotonic() - begun_s))
    raise SystemExit(code)


def say(text: str) -> None:
    click.echo(f"midspan serve: {text}", err=True)
