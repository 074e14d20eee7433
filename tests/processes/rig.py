"""A rig of real processes for tests: virtual frame on a pty or TCP port, supervisor, client. No mock anywhere."""

from __future__ import annotations

import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from daq.cards.frame import FrameCard
from daq.cards.load import example_path, load_frame, load_series
from daq.cli.session import Session
from daq.record.read import read_stream
from daq.record.verify import verify
from daq.station.client import Client
from daq.station.places import places_for
from daq.station.supervisor import Outfit, Supervisor
from daq.stream.updates import Update

GAP_MM = 0.15  # short approach: a bar takes about six seconds


@dataclass
class Rig:
    """Everything a test touches."""

    frame: FrameCard
    outfit: Outfit
    supervisor: Supervisor
    client: Client
    hands_path: Path
    simulator: subprocess.Popen[bytes]
    folder: Path
    said: list[str]
    updates: list[Update] = field(default_factory=list)
    session: Session = field(init=False)
    bench_alive: bool = True

    def __post_init__(self) -> None:
        self.session = Session(self.client, self._on_update)

    def _on_update(self, update: Update | None) -> None:
        if update is not None:
            self.updates.append(update)
        self.bench_alive &= self.supervisor.look()

    def hands(self, **words: Any) -> dict[str, Any]:
        """The simulated person does something; returns the answer."""
        own = self.folder / f"own-{time.monotonic_ns()}"
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
            line.bind(str(own))
            line.settimeout(5.0)
            line.sendto(json.dumps(words).encode(), str(self.hands_path))
            answer: dict[str, Any] = json.loads(line.recv(65536))
        own.unlink()
        return answer

    def begin(self, *, bars: str = "demo-series.toml") -> None:
        """Sit down, open the series, lay the first bar."""
        series = load_series(example_path(bars))
        self.open_series(example_path(bars))
        self.lay(series.specimens[0].model_dump(mode="json"))

    def open_series(self, path: Path) -> None:
        """Sit down and open a series."""
        self.client.sit("Rig")
        self.client.do("series", path=str(path), sure=True)

    def lay(self, specimen: Mapping[str, Any]) -> None:
        assert "mounted" in self.hands(mount=dict(specimen))

    def start_bar(self) -> str:
        """Mount, tare, start; returns the run id once the frame is moving."""
        run_id = str(self.session.mount()["run_id"])
        self.wait("ready", lambda: self.session.state == "ready")
        self.client.do("start")
        return run_id

    def wait(self, what: str, test: Callable[[], bool], timeout_s: float = 40.0) -> None:
        self.session.wait_for(what, test, timeout_s)

    def wait_loading(self) -> None:
        """The crosshead moves and the bar carries load: past the halt after the touch."""
        self.wait("load on the bar", lambda: self.session.state == "loading" and self.net_n() > 120.0)

    def pump(self, seconds: float) -> None:
        until_s = time.monotonic() + seconds
        while time.monotonic() < until_s:
            self.session.pump(0.02)

    def net_n(self) -> float:
        """The newest net force the feed has told."""
        for update in reversed(self.updates):
            if update.kind == "summary" and update.body.get("net_n") is not None:
                return float(update.body["net_n"])
        return float("nan")

    def events(self, name: str) -> list[Mapping[str, Any]]:
        return [u.body for u in self.updates if u.kind == "event" and u.body["event"] == name]

    def kill(self, role: str, how: int = signal.SIGKILL) -> None:
        os.kill(self.supervisor.pids[role], how)


@contextmanager
def rig_of(
    frame_card: str = "kiln-lane-demo.toml",
    *,
    bars_card: str = "alumina.toml",
    data: Path,
    gap_mm: float = GAP_MM,
    restarts_max: int = 100,
) -> Iterator[Rig]:
    """Start everything; end it in order whatever the test did."""
    with ExitStack() as stack:
        folder = runtime_folder(stack)
        card = write_card(frame_card, folder, gap_mm)
        machine = stack.enter_context(virtual_frame(card, bars_card, folder / "hands", folder))
        yield stand(stack, card, folder, machine, data=data, restarts_max=restarts_max)


def runtime_folder(stack: ExitStack) -> Path:
    """A short path on tmpfs, gone afterwards; midspan is told to live there."""
    folder = Path(tempfile.mkdtemp(prefix="msr-", dir="/dev/shm"))
    stack.callback(shutil.rmtree, folder, ignore_errors=True)
    patch = stack.enter_context(pytest.MonkeyPatch.context())
    patch.setenv("MIDSPAN_RUNTIME", str(folder))
    return folder


def stand(
    stack: ExitStack,
    card: Path,
    folder: Path,
    machine: subprocess.Popen[bytes],
    *,
    data: Path,
    restarts_max: int = 100,
) -> Rig:
    """The daemon for this card, and a client of it."""
    frame = with_port(load_frame(card), folder)
    said: list[str] = []
    outfit = Outfit(frame, places_for(frame.name, data), restarts_max=restarts_max)
    supervisor = stack.enter_context(Supervisor(outfit, said.append))
    client = stack.enter_context(Client(outfit.places))
    return Rig(frame, outfit, supervisor, client, folder / "hands", machine, folder, said)


def write_card(name: str, folder: Path, gap_mm: float) -> Path:
    """A shipped frame card with a shorter approach, and for TCP a port that is free now."""
    text = example_path(name).read_text("utf-8")
    lines = []
    for line in text.splitlines():
        if line.startswith("gap_mm"):
            line = f"gap_mm = {gap_mm}"
        elif line.startswith(("timeout_s", "silence_s")):
            line = line.split("=")[0] + "= 2.0"  # the machine that runs the tests may be busy
        elif line.startswith("tcp_port"):
            line = f"tcp_port = {free_port()}"
        lines.append(line)
    path = folder / name
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def with_port(frame: FrameCard, folder: Path) -> FrameCard:
    links = tuple(
        link.model_copy(update={"port": str(folder / link.port)}) if link.port else link
        for link in frame.links
    )
    return frame.model_copy(update={"links": links})


@contextmanager
def virtual_frame(card: Path, bars_card: str, hands: Path, folder: Path) -> Iterator[subprocess.Popen[bytes]]:
    import simulator

    bars = Path(simulator.__file__).parent / "examples" / bars_card
    command = [sys.executable, "-m", "simulator.wire", str(card), str(bars), "--hands", str(hands)]
    command += ["--truth", str(folder / "truth.jsonl")]
    process = subprocess.Popen(command, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        until_s = time.monotonic() + 20.0
        while not hands.exists():
            assert process.poll() is None and time.monotonic() < until_s, "the virtual frame did not start"
            time.sleep(0.02)
        yield process
    finally:
        process.terminate()
        process.wait(10)


def truths(folder: Path) -> list[dict[str, Any]]:
    """What really happened, as the virtual frame wrote it."""
    return [json.loads(line) for line in (folder / "truth.jsonl").read_text("utf-8").splitlines()]


def stands_still(rig: Rig, timeout_s: float = 3.0) -> bool:
    """The simulated machine itself says that it no longer moves."""
    until_s = time.monotonic() + timeout_s
    while time.monotonic() < until_s:
        if not rig.hands(query=True)["inputs"]["moving"]:
            return True
        time.sleep(0.02)
    return False


def records(folder: Path) -> list[Path]:
    return sorted(folder.glob("*/*.h5"))


def check_whole(record: Path) -> None:
    """Verifies, accounts for every row, and holds each entry once and in order."""
    found = verify(record)
    assert found.ok, found.problems
    sequences = [entry.sequence for entry in read_stream(record)]
    assert sequences == list(range(sequences[0], sequences[0] + len(sequences)))


def rig_series() -> Path:
    return example_path("demo-series.toml")
