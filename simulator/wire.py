"""The virtual frame as a process of its own: ports, hands and real time around a VirtualWire.

It takes no part in midspan: it plays the machine at the other end of the cable. Rows leave when due, on
a schedule counted from the start, so a late wake is made up for and nothing drifts.
"""

from __future__ import annotations

import argparse
import contextlib
import gc
import json
import select
import signal
import socket
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from importlib import resources
from pathlib import Path
from types import FrameType
from typing import TextIO

from daq.cards.frame import FrameCard
from daq.cards.load import load_frame
from daq.errors import MidspanError
from simulator.card import SimulatorCard, load_simulator
from simulator.hands import Hands
from simulator.ports import Port, open_port
from simulator.specimen import InHand
from simulator.virtual import VirtualWire

TICK_S = 0.001  # rows faster than this leave together: a finer sleep costs more than it shows
SLEEP_S_MAX = 0.05  # a signal to end is seen within this
NEXT_BAR_S = 1.0  # without hands: from a clear crosshead to the next bar
HAND_LINES_MAX = 16  # a round: hands may not keep the rows waiting
DEFAULT_CARD = "alumina.toml"


class Person:
    """Puts in bars where no hands were asked for: the next when the last is broken and the way clear."""

    def __init__(self, wire: VirtualWire) -> None:
        self._wire = wire
        self._number = 0
        self._clear_since_s: float | None = None
        self._next()

    def look(self, now_s: float) -> None:
        machine = self._wire.machine
        if not machine.broken or machine.moving or not machine.way_is_clear:
            self._clear_since_s = None
        elif self._clear_since_s is None:
            self._clear_since_s = now_s
        elif now_s - self._clear_since_s >= NEXT_BAR_S:
            self._next()

    def _next(self) -> None:
        self._number += 1
        self._clear_since_s = None
        self._wire.machine.mount(InHand(number=f"AUTO-{self._number:03d}"))


class HandsSocket:
    """A datagram socket that takes hand lines; answers where the sender has an address."""

    def __init__(self, path: Path, hands: Hands) -> None:
        self._path = path
        self._hands = hands
        with contextlib.suppress(FileNotFoundError):
            path.unlink()
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self._socket.bind(str(path))
        path.chmod(0o600)
        self._socket.setblocking(False)

    def fileno(self) -> int:
        return self._socket.fileno()

    def serve(self) -> None:
        for _ in range(HAND_LINES_MAX):
            try:
                data, sender = self._socket.recvfrom(65536)
            except BlockingIOError:
                return
            answers = [self._hands.do(line) for line in data.splitlines() if line.strip()]
            if sender:
                text = "".join(json.dumps(answer) + "\n" for answer in answers)
                with contextlib.suppress(OSError):
                    self._socket.sendto(text.encode(), sender)

    def close(self) -> None:
        self._socket.close()
        with contextlib.suppress(FileNotFoundError):
            self._path.unlink()


class WireLoop:
    """Real time around one virtual wire."""

    def __init__(self, wire: VirtualWire, ports: Sequence[Port], truth: TextIO | None) -> None:
        self._wire = wire
        self._ports = ports
        self._truth = truth
        self._ended = False

    def end(self, *_: int | FrameType | None) -> None:
        """Leave the loop within SLEEP_S_MAX; may be called by a signal."""
        self._ended = True

    def run(self, hands: HandsSocket | None, person: Person | None) -> None:
        origin_s = time.monotonic()
        while not self._ended:
            now_s = time.monotonic() - origin_s
            self._deliver(now_s)
            if person is not None:
                person.look(now_s)
            due_s = max(self._wire.next_s(), now_s + TICK_S / 2)
            wait_s = min(max(due_s - (time.monotonic() - origin_s), 0.0), SLEEP_S_MAX)
            fds = [fd for port in self._ports for fd in port.fds()]
            if hands is not None:
                fds.append(hands.fileno())
            ready, _, _ = select.select(fds, [], [], wait_s)
            if ready:
                self._listen(time.monotonic() - origin_s, set(ready), hands)

    def _deliver(self, now_s: float) -> None:
        self._wire.run_to(now_s)
        for number, port in enumerate(self._ports):
            if self._wire.connected(number):
                port.appear()
            else:
                port.vanish()
            port.write(b"".join(data for _, data in self._wire.read(now_s, number)))
        for truth in self._wire.machine.take_truths():
            if self._truth is not None:
                self._truth.write(json.dumps(asdict(truth)) + "\n")
                self._truth.flush()

    def _listen(self, now_s: float, ready: set[int], hands: HandsSocket | None) -> None:
        for number, port in enumerate(self._ports):
            if ready.intersection(port.fds()):
                data = port.read()
                if data:
                    self._wire.write(data, now_s, number)
        if hands is not None and hands.fileno() in ready:
            self._wire.settle(now_s)
            hands.serve()


def run_wire(
    frame_path: Path,
    card_path: Path | None = None,
    *,
    seed: int | None = None,
    hands: Path | None = None,
    truth: Path | None = None,
) -> int:
    """Play the machine until a signal ends it; the exit code. Relative port names stand in this folder."""
    try:
        frame = load_frame(frame_path)
        card = load_simulator(card_path or _shipped(DEFAULT_CARD))
        if seed is not None:
            card = card.model_copy(update={"seed": seed})
        with _ports(frame) as ports, _opened(truth) as truth_file:
            return _play(frame, card, ports, hands, truth_file)
    except (MidspanError, OSError) as error:
        sys.stderr.write(f"{error}\n")
        return 2


def _play(
    frame: FrameCard,
    card: SimulatorCard,
    ports: Sequence[Port],
    hands_path: Path | None,
    truth: TextIO | None,
) -> int:
    wire = VirtualWire(frame, card)
    loop = WireLoop(wire, ports, truth)
    signal.signal(signal.SIGTERM, loop.end)
    signal.signal(signal.SIGINT, loop.end)
    for link, port in zip(frame.links, ports, strict=True):
        sys.stdout.write(f"{frame.name} link {link.name}: {port.title}\n")
    sys.stdout.flush()
    hands = (
        HandsSocket(hands_path, Hands(wire, truthful=truth is not None)) if hands_path is not None else None
    )
    try:
        gc.collect()
        gc.freeze()
        loop.run(hands, Person(wire) if hands is None else None)
    finally:
        if hands is not None:
            hands.close()
    dropped = sum(port.dropped_bytes for port in ports)
    counts = " ".join(f"{name}={count}" for name, count in wire.counts().items())
    sys.stderr.write(f"{frame.name}: {counts} bytes_nobody_read={dropped}\n")
    return 0


@contextlib.contextmanager
def _ports(frame: FrameCard) -> Iterator[list[Port]]:
    ports: list[Port] = []
    try:
        for link in frame.links:
            ports.append(open_port(link, Path.cwd()))
        yield ports
    finally:
        for port in ports:
            port.close()


@contextlib.contextmanager
def _opened(path: Path | None) -> Iterator[TextIO | None]:
    if path is None:
        yield None
        return
    with path.open("a", encoding="utf-8") as file:
        yield file


def _shipped(name: str) -> Path:
    return Path(str(resources.files("simulator") / "examples" / name))


def main(argv: Sequence[str] | None = None) -> int:
    """python -m simulator.wire FRAME [CARD]"""
    parser = argparse.ArgumentParser(prog="simulator.wire", description="Play the machine of a frame card.")
    parser.add_argument("frame", type=Path)
    parser.add_argument("card", type=Path, nargs="?")
    parser.add_argument("--seed", type=int)
    parser.add_argument("--hands", type=Path)
    parser.add_argument("--truth", type=Path)
    asked = parser.parse_args(argv)
    return run_wire(asked.frame, asked.card, seed=asked.seed, hands=asked.hands, truth=asked.truth)


if __name__ == "__main__":
    raise SystemExit(main())
