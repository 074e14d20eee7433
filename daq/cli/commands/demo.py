"""midspan demo: the whole stack on a virtual frame, several bars, a picture and a table at the end."""

from __future__ import annotations

import csv
import datetime as dt
import json
import os
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from functools import partial
from importlib import resources
from pathlib import Path
from typing import Any

import click
import numpy as np
from rich import box
from rich.console import Console
from rich.table import Table

from daq.cards.frame import FrameCard
from daq.cards.load import load_frame
from daq.cli.session import Session
from daq.errors import MidspanError
from daq.station.client import Client
from daq.station.places import places_for
from daq.station.supervisor import Outfit, Supervisor
from daq.stream.updates import Update
from daq.watch.states import LATCHED as LATCHED_STATES
from monitor.presenter import Presenter
from monitor.qtlibs import check_window, here
from monitor.terminal import TerminalView
from monitor.wording import number

BARS_MAX = 100
LATCHED = frozenset(state.value for state in LATCHED_STATES)
COLUMNS = {
    "peak_n": "load N",
    "strength_mpa": "strength MPa",
    "strength_u_k2_mpa": "U k=2",
    "stress_rate_mean_mpa_s": "MPa/s",
    "modulus_gpa": "E GPa",
    "break_class": "break",
}
WIRE_TIMEOUT_S = 15.0
LAST_LOOK_S = 0.5
BAR_TIMEOUT_S = 120.0
AGAIN_MAX = 3  # a busy computer may interrupt a bar: it is loaded again, as a technician would


@click.command()
@click.option(
    "--out",
    type=click.Path(file_okay=False, path_type=Path),
    default=Path("demo-out"),
    show_default=True,
    help="Folder for records, picture and table.",
)
@click.option(
    "--bars", type=click.IntRange(1, BARS_MAX), default=3, show_default=True, help="How many bars to break."
)
@click.option("--seed", type=int, default=7, show_default=True, help="Seed of sizes, flaws and noise.")
@click.option("--no-window", is_flag=True, help="Stay in the terminal.")
def command(out: Path, bars: int, seed: int, no_window: bool) -> None:
    """Break a few simulated alumina bars at true pace: real processes, a real pty, sealed HDF5 records.

    Example: midspan demo --out demo-out --bars 3
    """
    console = Console()
    out = out.absolute()
    series = "demo-" + dt.datetime.now(dt.UTC).strftime("%Y%m%d-%H%M%S")
    cards = write_cards(out / "cards", series, bars, seed)
    with tempfile.TemporaryDirectory(prefix="midspan-demo-") as scratch:
        frame = with_port(load_frame(cards / "kiln-lane-demo.toml"), Path(scratch))
        with virtual_frame(cards, Path(scratch), seed) as hands:
            outfit = Outfit(frame, places_for(frame.name, out), own_machine=True)
            said = partial(console.print, markup=False)
            with (
                Supervisor(outfit, said) as supervisor,
                window_beside(console, frame.name, wanted=not no_window),
            ):
                reports = break_bars(console, supervisor, outfit, cards / f"{series}.toml", hands)
    finish(console, out / series, series, reports)


@contextmanager
def window_beside(console: Console, frame: str, *, wanted: bool) -> Iterator[None]:
    """A watching window as a process of its own, where there is a display and Qt; gone with the demo."""
    if not wanted:
        yield
        return
    try:
        check_window(here())
    except MidspanError as error:
        console.print(
            f"no window: {str(error).splitlines()[0].partition(': ')[2]}", markup=False, soft_wrap=True
        )
        yield
        return
    process = subprocess.Popen(
        [sys.executable, "-m", "daq.cli.entry", "watch", "--frame", frame], stdin=subprocess.DEVNULL
    )
    try:
        yield
    finally:
        process.terminate()
        process.wait(5)


# --- cards and the virtual frame
def write_cards(folder: Path, series: str, bars: int, seed: int) -> Path:
    """The demo's own copies of the shipped cards, with a bench sheet of as many bars as asked for."""
    folder.mkdir(parents=True, exist_ok=True)
    shipped = resources.files("daq.cards") / "examples"
    for name in ("kiln-lane-demo.toml", "alumina-demo.toml"):
        (folder / name).write_text((shipped / name).read_text("utf-8"), encoding="utf-8")
    card = (shipped / "demo-series.toml").read_text("utf-8")
    card = card.replace('"demo-series"', f'"{series}"').replace('"demo-series.csv"', f'"{series}.csv"')
    (folder / f"{series}.toml").write_text(card, encoding="utf-8")
    write_sheet(folder / f"{series}.csv", bars, seed)
    simulated = resources.files("simulator") / "examples" / "alumina.toml"
    (folder / "alumina.toml").write_text(simulated.read_text("utf-8"), encoding="utf-8")
    return folder


def write_sheet(path: Path, bars: int, seed: int) -> None:
    random = np.random.default_rng(seed)
    with path.open("w", newline="", encoding="utf-8") as file:
        sheet = csv.writer(file)
        sizes = [f"{side}_{place}_mm" for side in ("width", "thickness") for place in (1, 2, 3)]
        sheet.writerow(["number", *sizes, "chamfer_mm"])
        for number in range(1, bars + 1):
            width, thickness = random.uniform(3.98, 4.02), random.uniform(2.98, 3.02)
            readings = [
                f"{side + random.uniform(-0.002, 0.002):.3f}" for side in [width] * 3 + [thickness] * 3
            ]
            sheet.writerow([f"DEMO-{number:02d}", *readings, "0.12"])


def with_port(frame: FrameCard, folder: Path) -> FrameCard:
    """The card's pty stands in the demo's scratch folder."""
    link = frame.links[0].model_copy(update={"port": str(folder / str(frame.links[0].port))})
    return frame.model_copy(update={"links": (link, *frame.links[1:])})


@contextmanager
def virtual_frame(cards: Path, folder: Path, seed: int) -> Iterator[Path]:
    """`midspan simulate` as its own process, in the scratch folder; yields the socket of the person's hands."""
    hands = folder / "hands"
    words = ["simulate", str(cards / "kiln-lane-demo.toml"), "--bars", str(cards / "alumina.toml")]
    command = [sys.executable, "-m", "daq.cli.entry", *words, "--seed", str(seed), "--hands", str(hands)]
    said = folder / "said.txt"
    with said.open("w", encoding="utf-8") as told:
        process = subprocess.Popen(command, cwd=folder, stdin=subprocess.DEVNULL, stdout=told, stderr=told)
    try:
        until_s = time.monotonic() + WIRE_TIMEOUT_S
        while not (hands.exists() and any(folder.glob("*.tty"))):
            if process.poll() is not None or time.monotonic() > until_s:
                raise MidspanError(f"the virtual frame did not start: {said.read_text('utf-8').strip()}")
            time.sleep(0.02)
        yield hands
    finally:
        process.terminate()
        process.wait(5)


def lay_bar(hands: Path, specimen: Mapping[str, Any]) -> None:
    """The simulated person lays the next bar on the rollers."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
        line.sendto(json.dumps({"mount": dict(specimen)}).encode(), str(hands))


# --- the series
def break_bars(
    console: Console, supervisor: Supervisor, outfit: Outfit, series: Path, hands: Path
) -> list[Mapping[str, Any]]:
    from daq.cards.load import load_series

    loaded = load_series(series)
    presenter = Presenter()
    reports: list[Mapping[str, Any]] = []
    with Client(outfit.places) as client, TerminalView(console) as view:
        presenter.take_look(client.look(), time.monotonic())

        def on_update(update: Update | None) -> None:
            now_s = time.monotonic()
            if update is not None:
                presenter.take(update, now_s)
            if not supervisor.look():
                raise MidspanError("the bench process has ended")
            presenter.lost_updates = client.lost_updates
            if view.due(now_s):
                view.show(presenter.lines(now_s), now_s)

        client.sit(loaded.card.operator)
        client.do("series", path=str(series))
        session = Session(client, on_update)
        for specimen in loaded.specimens:
            lay_bar(hands, specimen.model_dump(mode="json"))
            report = session.break_bar(specimen.number, timeout_s=BAR_TIMEOUT_S)
            for _ in range(AGAIN_MAX):
                view.say(f"{specimen.number}: sealed in {report.get('seal_s', 0.0):.2f} s: {report['path']}")
                if not report["interrupted"]:
                    break
                view.say(
                    f"{specimen.number}: interrupted ({report['result'].get('reason')}); loaded once more"
                )
                look_and_reset(session, client, hands)
                report = session.break_bar(specimen.number, timeout_s=BAR_TIMEOUT_S)
            reports.append(report)
            clear_the_way(session, client, hands)
        client.rise()
        session.pump(LAST_LOOK_S)
        view.show(presenter.lines(time.monotonic()), time.monotonic(), last=True)
    return reports


def clear_the_way(session: Session, client: Client, hands: Path) -> None:
    """A stop may also come after the break, on a busy computer: it is latched, and no bar is called before a reset."""
    session.wait_for("standstill", lambda: not session.moving, BAR_TIMEOUT_S)
    if session.state in LATCHED:
        look_and_reset(session, client, hands)


def look_and_reset(session: Session, client: Client, hands: Path) -> None:
    """What a person does after an interrupted loading: look, raise the crosshead at its own panel, reset."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
        line.sendto(json.dumps({"raise": True}).encode(), str(hands))
    session.wait_for("standstill", lambda: not session.moving, BAR_TIMEOUT_S)
    client.do("reset", looked=True)
    session.wait_for("rest", lambda: session.state == "at rest", BAR_TIMEOUT_S)


# --- what is left
def finish(console: Console, folder: Path, series: str, reports: Sequence[Mapping[str, Any]]) -> None:
    """Summary table on screen and as CSV, picture and report of the series."""
    from daq.cli.reporting import gather, write_report
    from daq.record.read import read_meta, read_run
    from daq.series.picture import series_picture

    table = Table(
        title=f"{series} - SIMULATED DATA", box=box.SIMPLE_HEAD, padding=(0, 1), collapse_padding=True
    )
    table.add_column("bar", no_wrap=True)
    for heading in COLUMNS.values():
        table.add_column(heading, justify="right", no_wrap=True)
    with (folder / f"{series}.csv").open("x", newline="", encoding="utf-8") as file:
        sheet = csv.writer(file)
        sheet.writerow(["specimen", *COLUMNS])
        for report in reports:
            row = [report["result"].get(name) for name in COLUMNS]
            sheet.writerow([report["specimen"], *row])
            shown = (
                number(value, 1) if isinstance(value, float | None) else str(value or "-") for value in row
            )
            table.add_row(str(report["specimen"]), *shown)
    paths = [Path(str(report["path"])) for report in reports]
    records = [
        (str(r["specimen"]), read_run(p), read_meta(p)["result"]) for r, p in zip(reports, paths, strict=True)
    ]
    picture = folder / f"{series}.png"
    series_picture(records, picture, series)
    console.print(table)
    console.print(
        f"records  {folder}{os.sep}*.h5\npicture  {picture}\ntable    {folder / f'{series}.csv'}",
        soft_wrap=True,
    )
    written = list(write_report(gather(folder), folder))
    console.print(f"report   {written[0].with_suffix('')}.html .pdf .csv .json", soft_wrap=True)
