"""Harness: figures, quantiles, the state of the machine during a run, processes' CPU and memory, a C compiler.

A figure is worth nothing without its floor: the same work done by bare means in the same run, on the same machine,
under the same load. Every figure therefore carries its floor, the ratio, and how idle the machine was meanwhile.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

HERE = Path(__file__).resolve().parent
TICKS_HZ = os.sysconf("SC_CLK_TCK")
NS = 1_000_000_000


@dataclass(frozen=True, slots=True)
class Figure:
    """One line of the table. goal: words, never judged here."""

    benchmark: str
    name: str
    value: float
    unit: str
    floor: float | None = None
    floor_name: str = ""
    count: int | None = None
    goal: str = ""
    note: str = ""

    @property
    def ratio(self) -> float | None:
        return self.value / self.floor if self.floor else None


@dataclass(frozen=True, slots=True)
class Shares:
    """What the processors did between two looks, in percent of all of them together."""

    idle: float
    steal: float
    user: float
    system: float


@dataclass(slots=True)
class Report:
    """All figures of one run, and the machine's state during each benchmark."""

    quick: bool
    figures: list[Figure] = field(default_factory=list)
    machine: dict[str, Shares] = field(default_factory=dict)

    def add(self, benchmark: str, name: str, value: float, unit: str, **more: Any) -> None:
        figure = Figure(benchmark, name, value, unit, **more)
        self.figures.append(figure)
        print("    " + line_of(figure), flush=True)

    def quantiles(
        self,
        benchmark: str,
        name: str,
        values: Sequence[float],
        unit: str,
        floor: Sequence[float] = (),
        floor_name: str = "",
        goals: Mapping[str, str] | None = None,
        note: str = "",
    ) -> None:
        """p50, p99, p99.9 and the largest, each against the same quantile of the floor."""
        for label, share in (("p50", 0.5), ("p99", 0.99), ("p99.9", 0.999), ("max", 1.0)):
            self.add(
                benchmark,
                f"{name} {label}",
                quantile(values, share),
                unit,
                floor=quantile(floor, share) if floor else None,
                floor_name=floor_name if floor else "",
                count=len(values),
                goal=(goals or {}).get(label, ""),
                note=note,
            )

    def as_json(self) -> dict[str, Any]:
        return {
            "quick": self.quick,
            "python": sys.version.split()[0],
            "kernel": os.uname().release,
            "processors": os.cpu_count(),
            "compiler": compiler() or "",
            "machine": {name: asdict(shares) for name, shares in self.machine.items()},
            "figures": [{**asdict(figure), "ratio": figure.ratio} for figure in self.figures],
        }


def quantile(values: Sequence[float], share: float) -> float:
    """The value below which that share lies; nan where there is none."""
    if not values:
        return float("nan")
    ordered = sorted(values)
    return float(ordered[min(len(ordered) - 1, int(share * len(ordered)))])


def line_of(figure: Figure) -> str:
    """One figure as a line of the table."""
    ratio = f"{figure.ratio:8.2f} x" if figure.ratio is not None else " " * 10
    floor = f"{figure.floor:12.4g} {figure.floor_name}" if figure.floor is not None else ""
    goal = f"  goal {figure.goal}" if figure.goal else ""
    count = f"  n={figure.count}" if figure.count is not None else ""
    note = f"  ({figure.note})" if figure.note else ""
    return f"{figure.name:<58}{figure.value:12.4g} {figure.unit:<14}{ratio} {floor:<34}{count}{goal}{note}"


# --- the machine


def processor_ticks() -> list[int]:
    with open("/proc/stat", encoding="ascii") as file:
        return [int(word) for word in file.readline().split()[1:9]]


def shares_since(before: Sequence[int]) -> Shares:
    """user nice system idle iowait irq softirq steal."""
    spent = [after - early for early, after in zip(before, processor_ticks(), strict=True)]
    whole = max(sum(spent), 1) / 100.0
    return Shares(
        idle=(spent[3] + spent[4]) / whole,
        steal=spent[7] / whole,
        user=(spent[0] + spent[1]) / whole,
        system=(spent[2] + spent[5] + spent[6]) / whole,
    )


def cpu_s(pid: int) -> float:
    """Processor seconds of a living process, its waited-for children not counted."""
    text = Path(f"/proc/{pid}/stat").read_text("ascii", "replace")
    words = text.rpartition(")")[2].split()
    return (int(words[11]) + int(words[12])) / TICKS_HZ


def memory_kb(pid: int) -> dict[str, int]:
    """Rss, Pss, Locked (smaps_rollup) and the largest Rss so far (VmHWM)."""
    found = {}
    for line in Path(f"/proc/{pid}/smaps_rollup").read_text("ascii", "replace").splitlines()[1:]:
        key, _, rest = line.partition(":")
        if key in ("Rss", "Pss", "Locked"):
            found[key] = int(rest.split()[0])
    found["Hwm"] = high_water_kb(pid)
    return found


def high_water_kb(pid: int | str = "self") -> int:
    for line in Path(f"/proc/{pid}/status").read_text("ascii", "replace").splitlines():
        if line.startswith("VmHWM:"):
            return int(line.split()[1])
    return 0


# --- measuring


def spent_s(work: Callable[[], object]) -> float:
    """Processor seconds of one call in this process."""
    begin = time.process_time()
    work()
    return time.process_time() - begin


def least_s(works: Mapping[str, Callable[[], object]], repeats: int) -> dict[str, float]:
    """Shortest processor time of each, all of them tried in turn so that a disturbance meets all alike."""
    least = dict.fromkeys(works, float("inf"))
    for _ in range(repeats):
        for name, work in works.items():
            least[name] = min(least[name], spent_s(work))
    return least


# --- surroundings


@contextmanager
def scratch(*, on_disk: bool = False) -> Iterator[Path]:
    """A folder that goes afterwards: on tmpfs (sockets, ring), or on a disk for what is to be synced."""
    where = None if on_disk else "/dev/shm"
    folder = Path(tempfile.mkdtemp(prefix="msb-", dir=where))
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def compiler() -> str | None:
    """A C compiler, where there is one; MIDSPAN_BENCH_NO_C=1 does without."""
    if os.environ.get("MIDSPAN_BENCH_NO_C"):
        return None
    return shutil.which("cc") or shutil.which("gcc") or shutil.which("clang")


def compiled(name: str, folder: Path) -> Path | None:
    """benchmarks/<name>.c as a program in that folder; None without a compiler."""
    found = compiler()
    if found is None:
        return None
    program = folder / name
    subprocess.run(
        [found, "-O2", "-std=gnu11", "-Wall", "-o", str(program), str(HERE / f"{name}.c"), "-lm"], check=True
    )
    return program


def python_of(module: str) -> list[str]:
    """The command that runs one of our modules."""
    return [sys.executable, "-m", module]
