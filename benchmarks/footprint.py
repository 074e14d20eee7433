"""Footprint: processor time and memory of each process while a bar is loaded at 1 kHz; growth at 10 kHz.

The floor of the processor time is the bare Python loop (select, read, two comparisons) on the same rows at the same
time. Viewers and the instrument are not midspan's and stand apart. Growth: resident memory of each process at the
beginning and the end of a stretch at ten times the rate, so that an hour's rows pass in some minutes. The supervisor
lives in this process here and is left out: it looks at its children ten times a second.
"""

from __future__ import annotations

import os
import subprocess
from collections.abc import Mapping
from contextlib import ExitStack
from time import monotonic

from benchmarks.daemon import daemon, ended
from benchmarks.harness import Report, cpu_s, memory_kb, python_of
from benchmarks.response import LIMIT_COUNTS

NAME = "footprint"
MIB = 1024.0
ROLES = ("bench", "stopper", "recorder", "archivist", "station")


def run(report: Report) -> None:
    processor_time(report, 8.0 if report.quick else 60.0)
    growth(report, 10.0 if report.quick else 180.0)


def processor_time(report: Report, seconds: float) -> None:
    """One bar in LOADING, 1 kHz, for so long."""
    with ExitStack() as stack:
        served = stack.enter_context(daemon(1_000, streams=2, spacing_s=0.0))
        words = [*python_of("benchmarks.bare"), served.instrument.devices[1], str(LIMIT_COUNTS)]
        bare = stack.enter_context(ended(subprocess.Popen(words)))
        served.load()
        pids = {
            **{role: served.supervisor.pids[role] for role in ROLES},
            "one viewer": served.viewers[0].pid,
            "bare loop": bare.pid,
        }
        before, begun = {name: cpu_s(pid) for name, pid in pids.items()}, monotonic()
        served.pump(seconds)
        lasted = monotonic() - begun
        percent = {name: 100.0 * (cpu_s(pid) - before[name]) / lasted for name, pid in pids.items()}
        memory = {name: memory_kb(pid) for name, pid in pids.items()}
        assert served.session.state == "loading", served.session.state
    tell_processor_time(report, percent)
    for name, kb in memory.items():
        detail = f"Pss {kb['Pss'] / MIB:.0f}, locked {kb['Locked'] / MIB:.0f}"
        report.add(NAME, f"memory of {name} (Rss)", kb["Rss"] / MIB, "MiB", note=detail)


def tell_processor_time(report: Report, percent: Mapping[str, float]) -> None:
    floor = {"floor": percent["bare loop"], "floor_name": "bare loop"}
    whole = sum(percent[role] for role in ROLES)
    report.add(
        NAME, "processor, all at 1 kHz while loading", whole, "% of a core", **floor, goal="<= 15 % of a core"
    )
    for name, share in percent.items():
        report.add(NAME, f"processor of {name}", share, "% of a core", **floor)


def growth(report: Report, seconds: float) -> None:
    """Ten times the rate: what stays behind after so many rows."""
    with daemon(10_000, viewers=1) as served:
        served.load()
        served.pump(3.0)
        pids = {role: served.supervisor.pids[role] for role in ROLES}
        first = {role: memory_kb(pid)["Rss"] for role, pid in pids.items()}
        opened = {role: descriptors(pid) for role, pid in pids.items()}
        served.pump(seconds)
        rows = 10_000 * seconds
        for role, pid in pids.items():
            more_kib = memory_kb(pid)["Rss"] - first[role]
            report.add(
                NAME,
                f"growth of {role} over {rows / 1e6:g} million rows",
                more_kib / MIB,
                "MiB",
                floor=first[role] / MIB,
                floor_name="MiB at first",
                note=f"descriptors {opened[role]} -> {descriptors(pid)}",
            )


def descriptors(pid: int) -> int:
    return len(os.listdir(f"/proc/{pid}/fd"))
