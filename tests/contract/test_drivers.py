"""Every driver passes check_driver: on a pseudo-terminal, over TCP, and from recordings; a bad one does
not."""

import itertools
import struct

import numpy as np
import pytest
from little_machine import PtyMachine, TcpMachine
from wire_frames import MOTION, lines_frame, packets_frame

from daq.errors import DriverOpenError, LinkClosed, LinkLost, ProtocolViolation
from daq.stream.block import Block
from daq.stream.rundata import ChannelData, RunData
from drivers.contract import ContractBroken, World, check_driver
from drivers.decoded import Decoded
from drivers.driver import ChannelUnit, WireDriver
from drivers.replay import Recorded, ReplayDriver, recorded_run

pytestmark = pytest.mark.processes


@pytest.fixture
def pty_machine():
    machine = PtyMachine()
    machine.start()
    yield machine
    machine.close()


@pytest.fixture
def tcp_machine():
    machine = TcpMachine()
    machine.start()
    yield machine
    machine.close()


def repeat(count: int, action) -> None:
    for _ in range(count):
        action()


def pty_frame(port: str, **link):
    serial = {"kind": "serial", "port": port, "host": None, "tcp_port": None, "speed_baud": 460_800, **link}
    lines = {"prefix": "D", "counter_column": 1, "counter_modulus": 65536, "checksum": "xor8"}
    return lines_frame(lines, [{"name": "force", "column": 2}], link=serial, motion=MOTION)


def tcp_frame(port: int):
    fields = [{"name": "n", "number": "uint32"}, {"name": "f", "number": "int16"}]
    packets = {"sync": "7e81", "endian": "big", "fields": fields, "counter_field": "n", "reply_sync": "7e82"}
    channels = [{"name": "force", "field": "f"}]
    return packets_frame(packets, channels, link={"tcp_port": port}, motion=MOTION)


@pytest.mark.slow
def test_a_pseudo_terminal_keeps_the_contract(pty_machine):
    frame = pty_frame(pty_machine.port, start_command="RUN")
    world = World(
        heard=lambda: pty_machine.heard,
        stop_bytes=b"HALT\r\n",
        opening_bytes=b"RUN\r\n",
        hush=lambda: setattr(pty_machine, "quiet", True),
        wake=lambda: setattr(pty_machine, "quiet", False),
        lose=pty_machine.lose,
    )
    assert check_driver(lambda: WireDriver(frame), world) == []


@pytest.mark.slow
def test_tcp_keeps_the_contract(tcp_machine):
    world = World(
        heard=lambda: tcp_machine.heard,
        stop_bytes=b"HALT\r\n",
        hush=lambda: setattr(tcp_machine, "quiet", True),
        wake=lambda: setattr(tcp_machine, "quiet", False),
        lose=tcp_machine.lose,
    )
    assert check_driver(lambda: WireDriver(tcp_frame(tcp_machine.port)), world) == []


def test_nothing_but_garbage_is_a_violation_of_the_protocol(pty_machine):
    """Another speed, parity or dialect than the card's: said within the resynchronisation budget, not for ever."""
    frame = pty_frame(pty_machine.port)
    other = frame.links[0].lines.model_copy(update={"prefix": "X"})
    link = frame.links[0].model_copy(update={"lines": other})
    driver = WireDriver(frame.model_copy(update={"links": (link,)}))
    with pytest.raises(LinkClosed):
        driver.read(0.0)
    driver.open()
    with pytest.raises(ProtocolViolation, match="speed, parity or dialect") as caught:
        repeat(1000, lambda: driver.read(0.05))
    assert caught.value.discarded_bytes > 0
    driver.close()


def test_a_stop_that_does_not_go_out_is_said(pty_machine):
    """A machine that reads nothing: its input fills up, and a stop that is not taken whole is a lost link."""
    pty_machine.deaf = True
    driver = WireDriver(pty_frame(pty_machine.port))
    driver.open()
    with pytest.raises(LinkLost, match="may not have heard STOP"):
        repeat(100_000, driver.stop)
    driver.close()


def recording() -> RunData:
    """2 s at 1 kHz in which five samples are missing."""
    index = np.concatenate((np.arange(1000), np.arange(1005, 2005)))
    time_s = index * 0.001 + 7.0
    counts = (index % 50 - 25.0) * 1.0
    force = ChannelData("force", "force", "N", index, time_s, counts, counts * 0.1)
    return RunData({"force": force}, (), {})


@pytest.mark.slow
def test_a_replay_keeps_the_contract():
    frame = tcp_frame(1)
    recorded = recorded_run(recording(), frame, 0)
    world = World(rows=1500)
    assert "a time-out is kept" in check_driver(lambda: ReplayDriver(recorded, frame, pace=20.0), world)


def test_a_replay_gives_back_what_was_recorded():
    run, frame = recording(), tcp_frame(1)
    clock = itertools.count()  # every look at the clock finds it 1 s later
    driver = ReplayDriver(
        recorded_run(run, frame, 0), frame, pace=0.3, now_s=lambda: float(next(clock)), wait_s=lambda s: None
    )
    driver.open()
    parts = []
    while not driver.ended:
        part = driver.read(0.5)
        if part is not None:
            parts += part.blocks
    assert np.array_equal(
        np.concatenate([block.counts[:, 0] for block in parts]), run.channels["force"].counts
    )
    assert np.array_equal(np.concatenate([block.time_s for block in parts]), run.channels["force"].time_s)
    assert [(block.first_index, block.gap_samples) for block in parts if block.gap_samples] == [(1005, 5)]
    assert driver.read(0.1) is None


class MadeUp:
    """A driver in memory that keeps every promise, or breaks the one it is told to break."""

    def __init__(self, broken: str = "") -> None:
        self._broken = broken
        self._at = 0
        self._closed = True

    @property
    def channels(self):
        unit = "kgf" if self._broken == "unit" else "N"
        return (ChannelUnit("force", unit),)

    def open(self) -> None:
        self._closed = False

    def read(self, timeout_s: float):
        if self._closed and self._broken != "closed":
            raise LinkClosed("closed", driver="made up", device="-")
        index = self._at
        self._at += 15 if self._broken == "gap" else 10
        time_s = 1.0 + np.arange(index, index + 10) * 0.001
        if self._broken == "time":
            time_s[5] = time_s[4]
        block = Block(0, index, time_s, np.zeros((10, 2 if self._broken == "columns" else 1)))
        if self._broken == "writeable":
            block.counts.flags.writeable = True
        return Decoded((block,))

    def stop(self) -> None:
        if self._closed:
            raise LinkClosed("closed", driver="made up", device="-")

    def close(self) -> None:
        self._closed = True


def test_a_good_driver_in_memory_passes():
    assert len(check_driver(MadeUp, World())) == 4


@pytest.mark.parametrize("broken", ["unit", "closed", "gap", "time", "columns", "writeable"])
def test_a_broken_promise_is_found(broken):
    with pytest.raises(ContractBroken):
        check_driver(lambda: MadeUp(broken), World())


def test_a_driver_that_hides_the_loss_of_its_link_is_found():
    with pytest.raises(ContractBroken, match="LinkLost"):
        check_driver(MadeUp, World(lose=lambda: None, patience_s=0.2))
    assert issubclass(LinkLost, Exception)


def test_a_driver_that_moves_at_opening_is_found():
    said = [b""]

    class Mover(MadeUp):
        def open(self) -> None:
            super().open()
            said[0] += struct.pack("4s", b"GO 5")

    with pytest.raises(ContractBroken, match="opening"):
        check_driver(Mover, World(heard=lambda: said[0]))


def test_recordings_without_the_channel_are_refused():
    frame = tcp_frame(1)
    with pytest.raises(DriverOpenError, match="no channel force"):
        recorded_run(RunData({}, (), {}), frame, 0)
    empty = Recorded(np.empty(0, dtype=np.int64), np.empty(0), np.empty((0, 1)))
    driver = ReplayDriver(empty, frame)
    driver.open()
    assert driver.ended and driver.read(0.0) is None
