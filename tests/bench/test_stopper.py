"""The stopper as the real process on a real pty: dead bench, late bench, stop request, goodbye, stopper's own links."""

from __future__ import annotations

import json
import os
import pty
import select
import socket
import subprocess
import sys
import time
import tty
from collections.abc import Iterator
from dataclasses import dataclass

import pytest

STOP = b"\r\nS\r\nS\r\n"


@dataclass
class Rig:
    bench: socket.socket
    machine: int
    process: subprocess.Popen[bytes]

    def heard(self, timeout_s: float) -> bytes:
        return os.read(self.machine, 256) if select.select([self.machine], [], [], timeout_s)[0] else b""


@pytest.fixture
def rig() -> Iterator[Rig]:
    machine, slave = pty.openpty()
    tty.setraw(slave)
    os.set_blocking(slave, False)
    ours, theirs = socket.socketpair(socket.AF_UNIX, socket.SOCK_SEQPACKET)
    command = [sys.executable, "-E", "-s", "-m", "daq.bench.stopper", str(theirs.fileno())]
    process = subprocess.Popen(command, pass_fds=(theirs.fileno(),))
    theirs.close()
    order = json.dumps({"deadline_s": 0.3, "stop": STOP.hex()}).encode()
    socket.send_fds(ours, [order], [slave])
    os.close(slave)
    yield Rig(ours, machine, process)
    process.kill()
    process.wait()
    ours.close()
    os.close(machine)


def beat(rig: Rig, seconds: float) -> None:
    until_s = time.monotonic() + seconds
    while time.monotonic() < until_s:
        rig.bench.send(b".")
        time.sleep(0.02)


@pytest.mark.slow
@pytest.mark.processes
def test_a_dead_bench_is_a_stop_and_repeats(rig: Rig) -> None:
    beat(rig, 0.5)
    assert rig.heard(0.0) == b""
    rig.bench.close()
    assert rig.heard(5.0).startswith(STOP)
    assert rig.heard(5.0).startswith(STOP)
    assert rig.process.wait(10) == 3


@pytest.mark.slow
@pytest.mark.processes
def test_a_late_bench_is_a_stop_and_is_told(rig: Rig) -> None:
    beat(rig, 0.3)
    assert rig.heard(5.0).startswith(STOP)
    assert rig.bench.recv(64) == b"late"


@pytest.mark.slow
@pytest.mark.processes
def test_a_handed_over_stop_and_a_goodbye(rig: Rig) -> None:
    beat(rig, 0.2)
    rig.bench.send(b"stop")
    assert rig.heard(5.0) == STOP
    rig.bench.send(b"bye")
    assert rig.process.wait(5) == 0
