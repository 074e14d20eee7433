"""A stop request, a killed bench, a frozen bench: until the STOP is at the instrument.

Requests: `send_stop` and the whole process `midspan stop`, at rest, also with the station frozen by SIGSTOP; from the
call (or from starting the process) to after the instrument's read of the bytes. Floor of `send_stop`: a datagram to a
bare process that writes the same bytes. Killed and frozen: the real stopper with a stand-in for the bench process that
holds as much locked memory and beats as often (standin.py); from the signal to the bytes, for the frozen one less its
deadline, counted from the last beat.
"""

from __future__ import annotations

import json
import os
import pty
import select
import signal
import socket
import subprocess
import sys
import time
import tty
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path

from benchmarks.daemon import Daemon, daemon, ended
from benchmarks.harness import Report, memory_kb, python_of, quantile
from daq.station.stopline import send_stop

NAME = "stops"
WHO = "benchmark"
REQUEST_GOALS = {"p99": "<= 50 ms"}
KILLED_GOALS = {"p99": "<= 15 ms"}
DEADLINE_S = 0.25


def run(report: Report) -> None:
    requests(report, 30 if report.quick else 300)
    killed(report, 10 if report.quick else 150)
    frozen(report, 3 if report.quick else 50)


# --- requests


def requests(report: Report, times: int) -> None:
    with daemon(1_000, viewers=3) as served:
        at_rest = asked(served, times, lambda: send_stop(served.outfit.frame.name, WHO))
        by_command = asked(served, max(5, times // 10), lambda: command(served.outfit.frame.name))
        station = served.supervisor.pids["station"]
        os.kill(station, signal.SIGSTOP)
        try:
            frozen_station = asked(served, times, lambda: send_stop(served.outfit.frame.name, WHO))
        finally:
            os.kill(station, signal.SIGCONT)
        heard = served.instrument.end().stops.get(0, [])
    floor_ms = bare_requests(times)
    sent = [*at_rest, *by_command, *frozen_station]
    delays_ms = delays(sent, heard)
    cuts = (0, len(at_rest), len(at_rest) + len(by_command), len(sent))
    names = ("send_stop -> STOP,", "midspan stop, started -> STOP,", "send_stop -> STOP, station frozen,")
    for name, begin, end in zip(names, cuts, cuts[1:], strict=False):
        floor = floor_ms if "send_stop" in name else ()
        report.quantiles(
            NAME,
            name,
            delays_ms[begin:end],
            "ms",
            floor=floor,
            floor_name="bare datagram",
            goals=REQUEST_GOALS,
        )


def asked(served: Daemon, times: int, ask: object) -> list[int]:
    """When each request began; the supervisor is looked after between them."""
    begun = []
    for _ in range(times):
        begun.append(time.monotonic_ns())
        ask()  # type: ignore[operator]
        time.sleep(0.02)
        served.supervisor.look()
    return begun


def command(frame: str) -> None:
    words = [sys.executable, "-m", "daq.cli.entry", "stop", frame]
    subprocess.run(words, stdout=subprocess.DEVNULL, check=True)


def delays(sent: list[int], heard: list[int]) -> list[float]:
    """Each request to the first STOP after it, ms; inf where none came before the next request."""
    found = []
    for begun, until in zip(sent, [*sent[1:], 1 << 62], strict=True):
        answer = next((at for at in heard if begun <= at < until), None)
        found.append((answer - begun) / 1e6 if answer is not None else float("inf"))
    return found


BARE = """
import os, socket, sys
line = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
line.bind(sys.argv[1])
while True:
    line.recv(256)
    os.write(int(sys.argv[2]), b"S\\r\\n")
"""


def bare_requests(times: int) -> list[float]:
    """The floor: datagram in, bytes out, nothing between."""
    with ExitStack() as stack:
        link = stack.enter_context(wire())
        address = f"/dev/shm/msb-bare-{os.getpid()}"
        stack.callback(lambda: Path(address).unlink(missing_ok=True))
        words = [sys.executable, "-c", BARE, address, str(link.slave)]
        stack.enter_context(ended(subprocess.Popen(words, pass_fds=(link.slave,))))
        line = stack.enter_context(socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM))
        while not Path(address).exists():
            time.sleep(0.01)
        taken = []
        for _ in range(times):
            begun = time.monotonic_ns()
            line.sendto(WHO.encode(), address)
            taken.append((link.heard_ns(1.0) - begun) / 1e6)
            time.sleep(0.005)
    return taken


# --- the stopper


@dataclass(frozen=True, slots=True)
class Wire:
    """A pty: our end is the machine's."""

    master: int
    slave: int

    def heard_ns(self, timeout_s: float) -> int:
        """When bytes came; all of them are taken."""
        if not select.select([self.master], [], [], timeout_s)[0]:
            raise RuntimeError("no STOP came")
        at_ns = time.monotonic_ns()
        os.read(self.master, 4096)
        return at_ns


@contextmanager
def wire() -> Iterator[Wire]:
    master, slave = pty.openpty()
    tty.setraw(slave)
    os.set_blocking(slave, False)
    try:
        yield Wire(master, slave)
    finally:
        os.close(master)
        os.close(slave)


@contextmanager
def standin(link: Wire) -> Iterator[subprocess.Popen[bytes]]:
    """The real stopper, and a stand-in for the bench that has told it its link and beats."""
    ours, theirs = socket.socketpair(socket.AF_UNIX, socket.SOCK_SEQPACKET)
    stopper_words = [sys.executable, "-E", "-s", "-m", "daq.bench.stopper", str(theirs.fileno())]
    bench_words = [*python_of("benchmarks.standin"), str(ours.fileno()), str(link.slave), str(DEADLINE_S)]
    with ExitStack() as stack:
        stack.enter_context(ended(subprocess.Popen(stopper_words, pass_fds=(theirs.fileno(),))))
        bench = subprocess.Popen(
            bench_words,
            pass_fds=(ours.fileno(), link.slave),
            stdout=subprocess.PIPE,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"},  # as the supervisor does
        )
        stack.enter_context(ended(bench))
        theirs.close()
        ours.close()
        assert bench.stdout is not None
        told = json.loads(bench.stdout.readline())
        assert told["beating"]
        time.sleep(0.1)
        yield bench


def killed(report: Report, times: int) -> None:
    taken_ms, locked_mb = [], 0.0
    for _ in range(times):
        with wire() as link, standin(link) as bench:
            locked_mb = memory_kb(bench.pid)["Locked"] / 1024
            begun = time.monotonic_ns()
            bench.kill()
            taken_ms.append((link.heard_ns(3.0) - begun) / 1e6)
    note = f"{locked_mb:.0f} MB locked"
    report.quantiles(NAME, "bench killed -> STOP,", taken_ms, "ms", goals=KILLED_GOALS, note=note)


def frozen(report: Report, times: int) -> None:
    """The deadline counts from the last beat, up to 20 ms before the signal; so the excess may be below zero."""
    excess_ms = []
    for _ in range(times):
        with wire() as link, standin(link) as bench:
            begun = time.monotonic_ns()
            bench.send_signal(signal.SIGSTOP)
            excess_ms.append((link.heard_ns(3.0) - begun) / 1e6 - DEADLINE_S * 1e3)
    report.add(
        NAME, "bench frozen -> STOP, beyond the deadline, p50", quantile(excess_ms, 0.5), "ms", count=times
    )
    report.add(
        NAME,
        "bench frozen -> STOP, beyond the deadline, max",
        max(excess_ms),
        "ms",
        count=times,
        goal="<= 10 ms",
    )
