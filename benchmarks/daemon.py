"""The whole daemon with real processes, on the instrument's pty, brought to LOADING as an operator would."""

from __future__ import annotations

import os
import subprocess
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path

from benchmarks import lane
from benchmarks.harness import python_of, scratch
from benchmarks.instrument import Instrument, instrument
from daq.cli.session import Session
from daq.station.client import Client
from daq.station.places import places_for
from daq.station.supervisor import Outfit, Supervisor
from daq.stream.updates import Update

SETTLE_S = 1.5  # in LOADING before anything is measured


@dataclass
class Daemon:
    """A served frame and what talks to it."""

    supervisor: Supervisor
    client: Client
    session: Session
    instrument: Instrument
    folder: Path
    outfit: Outfit
    viewers: list[subprocess.Popen[bytes]]

    def load(self) -> None:
        """Sit, open the series, mount, start; returns some time after LOADING was reached."""
        self.client.sit("Benchmark")
        self.client.do("series", path=str(lane.write_series(self.folder)), sure=True)
        self.session.mount()
        self.wait_for("ready", lambda: self.session.state == "ready")
        self.client.do("start")
        self.wait_for("loading", lambda: self.session.state in ("loading", "stopped", "signal lost"))
        if self.session.state != "loading":
            raise RuntimeError(f"not loading: {self.client.look()['state']['faults']}")
        self.pump(SETTLE_S)

    def wait_for(self, what: str, test: Callable[[], bool], timeout_s: float = 60.0) -> None:
        self.session.wait_for(what, test, timeout_s)

    def pump(self, seconds: float) -> None:
        until_s = time.monotonic() + seconds
        while time.monotonic() < until_s:
            self.session.pump(0.05)

    def pids(self) -> dict[str, int]:
        """Every process of ours by its role, viewers and instrument apart."""
        return {"supervisor": os.getpid(), **self.supervisor.pids}


@contextmanager
def daemon(
    rate_hz: float,
    *,
    viewers: int = 3,
    streams: int = 1,
    spacing_s: float = 0.01,
    bench_module: str = "daq.bench.loop",
    counter: bool = True,
) -> Iterator[Daemon]:
    """Everything started; ended in order whatever happened. Sockets and ring on tmpfs, journal and records on disk."""
    with ExitStack() as stack:
        folder = stack.enter_context(scratch())
        disk = stack.enter_context(scratch(on_disk=True))
        stack.enter_context(runtime_in(folder))
        stiffness = lane.stiffness_n_mm(lane.frame_card(rate_hz, "none"), lane.slow_series())
        started = stack.enter_context(
            instrument(folder, rate_hz, stiffness, streams=streams, spacing_s=spacing_s)
        )
        frame = lane.frame_card(rate_hz, started.devices[0], counter=counter)
        outfit = Outfit(frame, places_for(frame.name, disk), bench_module=bench_module)
        supervisor = stack.enter_context(Supervisor(outfit, print))
        client = stack.enter_context(Client(outfit.places))

        def look(update: Update | None) -> None:
            if not supervisor.look():
                raise RuntimeError("the bench process has ended")

        watchers = [
            stack.enter_context(
                ended(subprocess.Popen([*python_of("benchmarks.viewer"), frame.name, str(disk)]))
            )
            for _ in range(viewers)
        ]
        yield Daemon(supervisor, client, Session(client, look), started, folder, outfit, watchers)


@contextmanager
def runtime_in(folder: Path) -> Iterator[None]:
    """Sockets and ring stand below that folder while this lasts."""
    before = os.environ.get("MIDSPAN_RUNTIME")
    os.environ["MIDSPAN_RUNTIME"] = str(folder)
    try:
        yield
    finally:
        if before is None:
            del os.environ["MIDSPAN_RUNTIME"]
        else:
            os.environ["MIDSPAN_RUNTIME"] = before


@contextmanager
def ended(process: subprocess.Popen[bytes]) -> Iterator[subprocess.Popen[bytes]]:
    """A helper process that goes with its block."""
    try:
        yield process
    finally:
        process.kill()
        process.wait()
