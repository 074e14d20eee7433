"""The bench process in the test's own process, on real sockets, turned by hand: nothing forked, nothing hurried."""

from __future__ import annotations

import json
import socket
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from daq.bench.loop import BenchConfig, BenchProcess
from daq.bench.ports import Port
from daq.cards.frame import FrameCard
from daq.stream.block import Block
from daq.stream.entry import Kind
from daq.stream.payloads import unpack_block, unpack_event, unpack_raw
from daq.stream.ring import RingReader

STREAM_ID = 11
TURNS_S = 10.0


@dataclass
class TurnedBench:
    """What the ring has been given is kept here, decoded."""

    process: BenchProcess
    reader: RingReader
    ours: tuple[socket.socket, socket.socket]
    events: list[dict[str, Any]] = field(default_factory=list)
    blocks: list[Block] = field(default_factory=list)
    sent: list[bytes] = field(default_factory=list)

    @property
    def ports(self) -> list[Port]:
        return self.process._ports

    @property
    def missing(self) -> tuple[str, ...]:
        """What stands against a motion just now."""
        return tuple(self.process._core.pipeline.snapshot()["missing"])  # type: ignore[arg-type]

    def turn(self) -> None:
        self.process._turn()
        for entry in self.reader.read_new():
            if entry.kind is Kind.EVENT:
                self.events.append(dict(unpack_event(entry.payload)))
            elif entry.kind is Kind.BLOCK:
                self.blocks.append(unpack_block(entry.payload))
            elif (raw := unpack_raw(entry.payload)).sent:
                self.sent.append(raw.data)

    def until(self, done: Callable[[], bool]) -> None:
        end_s = time.monotonic() + TURNS_S
        while not done():
            assert time.monotonic() < end_s, self.events[-5:]
            self.turn()

    def named(self, name: str) -> list[dict[str, Any]]:
        return [event for event in self.events if event["event"] == name]


@contextmanager
def turned(frame: FrameCard) -> Iterator[TurnedBench]:
    """Its links must have somebody to connect to."""
    with ExitStack() as stack:
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="msb-", dir="/dev/shm")))
        life, stopper = (socket.socketpair(socket.AF_UNIX, socket.SOCK_SEQPACKET) for _ in range(2))
        config = BenchConfig(
            frame=json.loads(frame.model_dump_json()),
            stream_id=STREAM_ID,
            ring_path=str(folder / "ring"),
            ring_bytes=1 << 20,
            stop_socket=str(folder / "stop"),
            bench_socket=str(folder / "bench"),
            life_fd=life[1].detach(),
            stopper_fd=stopper[1].detach(),
            deadline_s=0.5,
            clean_start=True,
            proven={"polarity": True, "stop_drill": True},
            fifo=False,
        )
        process = BenchProcess(config)
        process._attach()
        try:
            yield TurnedBench(process, RingReader(folder / "ring"), (life[0], stopper[0]))
        finally:
            process._goodbye(resting=True)
            process._life.close()
            process._stop_socket.close()
            process._bench_socket.close()
            for end in (life[0], stopper[0]):
                end.close()
