"""Start-up times: the daemon until everything is ready, `midspan stop`, `midspan --help`, against a bare interpreter.

The floor is `python -c pass` of the same interpreter, started in turn with the others. The daemon's time is from asking
for it to the last "ready" of bench, recorder, archivist and station; the instrument's pty exists already.
"""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Sequence
from contextlib import ExitStack

from benchmarks import lane
from benchmarks.daemon import runtime_in
from benchmarks.harness import Report, scratch
from benchmarks.instrument import instrument
from daq.station.places import places_for
from daq.station.supervisor import Outfit, Supervisor

NAME = "startup"
COMMANDS = {
    "python -c pass": ("-c", "pass"),
    "midspan stop (no frame served)": ("-m", "daq.cli.entry", "stop", "bench-lane"),
    "midspan --help": ("-m", "daq.cli.entry", "--help"),
    "midspan run --help": ("-m", "daq.cli.entry", "run", "--help"),
}
GOALS = {"midspan stop (no frame served)": "about 100 ms"}


def run(report: Report) -> None:
    commands(report, 5 if report.quick else 25)
    supervisor(report, 2 if report.quick else 10)


def commands(report: Report, times: int) -> None:
    taken: dict[str, list[float]] = {name: [] for name in COMMANDS}
    with scratch() as folder, runtime_in(folder):
        for _ in range(times):
            for name, words in COMMANDS.items():
                taken[name].append(started_ms([sys.executable, *words]))
    floor_ms = middle(taken["python -c pass"])
    for name, each in taken.items():
        report.add(
            NAME,
            f"{name}, median",
            middle(each),
            "ms",
            floor=floor_ms,
            floor_name="python -c pass",
            count=times,
            goal=GOALS.get(name, ""),
        )


def started_ms(command: Sequence[str]) -> float:
    begun = time.perf_counter()
    subprocess.run(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=False)
    return (time.perf_counter() - begun) * 1e3


def supervisor(report: Report, times: int) -> None:
    ready_ms, ended_ms, bare_ms = [], [], []
    for _ in range(times):
        with ExitStack() as stack:
            folder, disk = stack.enter_context(scratch()), stack.enter_context(scratch(on_disk=True))
            stack.enter_context(runtime_in(folder))
            device = stack.enter_context(instrument(folder, 1_000.0, 3_000.0)).devices[0]
            bare_ms.append(started_ms([sys.executable, "-c", "import numpy, pydantic, h5py, zmq.asyncio"]))
            frame = lane.frame_card(1_000, device)
            begun = time.perf_counter()
            served = Supervisor(Outfit(frame, places_for(frame.name, disk)), print)
            with served:
                ready = time.perf_counter()
                ready_ms.append((ready - begun) * 1e3)
                time.sleep(0.3)
                leaving = time.perf_counter()
            ended_ms.append((time.perf_counter() - leaving) * 1e3)
    floor_ms = middle(bare_ms)
    report.add(
        NAME,
        "daemon ready, median",
        middle(ready_ms),
        "ms",
        floor=floor_ms,
        floor_name="bare imports",
        count=times,
        goal="about 250 ms",
    )
    report.add(NAME, "daemon ended in order, median", middle(ended_ms), "ms", count=times)


def middle(values: Sequence[float]) -> float:
    return sorted(values)[len(values) // 2]
