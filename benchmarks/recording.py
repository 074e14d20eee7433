"""The recording path: rows a second from the ring through the journal to the live HDF5 file, and the seal at the close.

Real recorder and archivist, both on one processor; a producer on another puts entries of three channels (raw bytes
and decoded block) into a real ring, a thousand reads a second. A rate is sustained when nothing is lost, the ring
holds less than a second at the end, and the archivist is less than 1.5 s behind (it reports twice a second). Floor:
one process that appends the same columns to an HDF5 file with the same settings (SWMR, chunks, gzip 1, shuffle,
Fletcher-32, a flush every 0.15 s of data), processor seconds a million rows. Seal: a run made by the real core
(loaded.py), archived from its journal by the real archivist with the real reduction; time as the archivist reports
it, memory as the highest of its process.
"""

from __future__ import annotations

import json
import os
import subprocess
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from threading import Thread
from typing import IO, Any

import h5py
import numpy as np

from benchmarks.harness import Report, cpu_s, python_of, scratch
from benchmarks.loaded import Loaded
from daq.bench.core import NewEntry
from daq.record.schema import CHUNK_ROWS, FILTERS, LIBVER
from daq.stream.entry import Entry, pack_all
from daq.stream.journal import Journal

NAME = "recording"
RATES_HZ = (50_000, 100_000, 200_000, 300_000, 400_000, 600_000)
RATES_QUICK_HZ = (100_000, 200_000)
COLUMNS = 8  # index, time, and counts and value of three channels
FLOOR_ROWS = 2_000_000
SHOW_S = 0.15


def run(report: Report) -> None:
    floor_s = bare_append(FLOOR_ROWS // (10 if report.quick else 1))
    report.add(
        NAME,
        "bare h5py append, same settings, per million rows",
        floor_s,
        "CPU s",
        note=f"{1 / floor_s:.2f} MS/s",
    )
    seconds = 4.0 if report.quick else 15.0
    best = 0.0
    for rate_hz in RATES_QUICK_HZ if report.quick else RATES_HZ:
        if not sustained(report, rate_hz, seconds, floor_s):
            break
        best = rate_hz
    report.add(
        NAME,
        "highest rate tried that is sustained on one core",
        best,
        "rows/s",
        goal=">= 200 000 of 3 channels",
    )
    seal(report, 1_000, 20.0, 0.35, 1, "1 s")
    seal(report, 5_000, 30.0 if report.quick else 600.0, 0.25 if report.quick else 0.0125, 50, "15 s, 200 MB")


# --- rates


@dataclass
class Part:
    """One process of the path and the lines it says."""

    process: subprocess.Popen[str]
    said: list[dict[str, Any]] = field(default_factory=list)

    def listen(self) -> None:
        assert self.process.stdout is not None
        self.said.extend(json.loads(line) for line in lines_of(self.process.stdout))

    def last(self, key: str, default: Any = 0) -> Any:
        return next((line[key] for line in reversed(self.said) if key in line), default)

    def wait_for(self, key: str, value: object, timeout_s: float = 30.0) -> dict[str, Any]:
        until_s = time.monotonic() + timeout_s
        while time.monotonic() < until_s:
            for line in self.said:
                if line.get(key) == value:
                    return line
            if self.process.poll() is not None:
                raise RuntimeError(f"{self.process.args} has ended")
            time.sleep(0.01)
        raise RuntimeError(f"no {key} = {value} within {timeout_s:.0f} s")


def lines_of(stream: IO[str]) -> Iterator[str]:
    yield from stream


@contextmanager
def part(*words: object, processor: int | None = None) -> Iterator[Part]:
    command = [*python_of("benchmarks.recording_parts"), *map(str, words)]
    process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    if processor is not None and processor < (os.cpu_count() or 1):
        os.sched_setaffinity(process.pid, {processor})
    started = Part(process)
    listener = Thread(target=started.listen, daemon=True)
    listener.start()
    try:
        yield started
        assert process.stdin is not None
        process.stdin.close()
        process.wait(60)
    finally:
        process.kill()
        process.wait()
        listener.join(5)


def sustained(report: Report, rate_hz: int, seconds: float, floor_s: float) -> bool:
    """Whether the path keeps up with this rate."""
    with ExitStack() as stack:
        tmp, disk = stack.enter_context(scratch()), stack.enter_context(scratch(on_disk=True))
        ring, journal = tmp / "ring", disk / "journal"
        producer = stack.enter_context(part("producer", ring, rate_hz, seconds, processor=1))
        wait_until(lambda: ring.exists() and ring.stat().st_size > 4096)
        recorder = stack.enter_context(part("recorder", ring, journal, processor=0))
        recorder.wait_for("report", "status")
        archivist = stack.enter_context(part("archivist", journal, disk, "none", processor=0))
        archivist.wait_for("report", "status")
        pids = {"recorder": recorder.process.pid, "archivist": archivist.process.pid}
        before = {name: cpu_s(pid) for name, pid in pids.items()}
        assert producer.process.stdin is not None
        producer.process.stdin.write("begin\n")
        producer.process.stdin.flush()
        wait_until(lambda: producer.last("rows") >= rate_hz * seconds, seconds * 4 + 20)
        behind = 1.0 - archivist.last("sequence") / producer.last("sequence", 1)
        spent_s = {name: cpu_s(pid) - before[name] for name, pid in pids.items()}
        told = dict(producer.said[-1])
    lag_s = told["lag_bytes"] / told["capacity"] * 10.0
    behind_s = max(0.0, behind * seconds)
    kept = told["lost"] == 0 and lag_s < 1.0 and behind_s < 1.5 and told["late_s"] < 0.5
    million = rate_hz * seconds / 1e6
    note = (
        f"ring holds {lag_s:.2f} s, archivist {behind_s:.2f} s behind, producer {told['late_s']:.2f} s late"
    )
    cpu = sum(spent_s.values()) / million
    report.add(
        NAME,
        f"{rate_hz / 1e3:g} kS/s x 3: recorder + archivist per million rows",
        cpu,
        "CPU s",
        floor=floor_s,
        floor_name="bare h5py append",
        note=f"{'sustained' if kept else 'NOT sustained'}; {note}",
    )
    for name, each_s in spent_s.items():
        report.add(
            NAME, f"{rate_hz / 1e3:g} kS/s x 3: processor of {name}", 100.0 * each_s / seconds, "% of a core"
        )
    return kept


def wait_until(test: Any, timeout_s: float = 30.0) -> None:
    until_s = time.monotonic() + timeout_s
    while not test():
        if time.monotonic() > until_s:
            raise RuntimeError("waited in vain")
        time.sleep(0.01)


def bare_append(rows: int) -> float:
    """Processor seconds a million rows of plain appending."""
    step = int(200_000 * SHOW_S)
    dice = np.random.default_rng(2)
    with scratch(on_disk=True) as folder, h5py.File(folder / "bare.h5", "w", libver=LIBVER) as file:
        columns = [
            file.create_dataset(
                f"c{number}", shape=(0,), maxshape=(None,), chunks=(CHUNK_ROWS,), dtype="<f8", **FILTERS
            )
            for number in range(COLUMNS)
        ]
        file.swmr_mode = True
        values = [made_column(number, step, dice) for number in range(COLUMNS)]
        begun = time.process_time()
        for at in range(0, rows, step):
            for column, value in zip(columns, values, strict=True):
                column.resize((at + step,))
                column[at:] = value + at
            for column in columns:
                column.flush()
        spent = time.process_time() - begun
    return spent / (-(-rows // step) * step) * 1e6


def made_column(number: int, rows: int, dice: np.random.Generator) -> np.ndarray:
    """An index, times, three channels of counts, three of values: as compressible as the real ones."""
    if number == 0:
        return np.arange(rows, dtype=np.float64)
    if number == 1:
        return np.arange(rows) / 200_000.0
    counts = np.rint(dice.normal(20_000.0, 9.0, rows))
    return counts if number < 5 else counts * 0.016


# --- seal


def seal(
    report: Report, rate_hz: int, seconds: float, speed_mm_min: float, rows_per_feed: int, goal: str
) -> None:
    """One bar of that length, from its journal to the sealed record."""
    with ExitStack() as stack:
        disk = stack.enter_context(scratch(on_disk=True))
        rows = make_journal(disk / "journal", rate_hz, seconds, speed_mm_min, rows_per_feed)
        archivist = stack.enter_context(part("archivist", disk / "journal", disk, "real"))
        sealed = archivist.wait_for("report", "sealed", 600.0)
        before_kb = next((line["hwm_kb"] for line in archivist.said if line["report"] != "sealed"), 0)
        failure = sealed["result"].get("failure", "")
    label = f"bar of {seconds:g} s at {rate_hz / 1e3:g} kHz"
    note = failure or f"{rows:,} rows, verdict {sealed['result'].get('verdict', '?')}"
    report.add(NAME, f"{label}: seal", sealed["seal_s"], "s", goal=goal, note=note)
    report.add(
        NAME, f"{label}: highest memory of the archivist", sealed["hwm_kb"] / 1024, "MiB", goal=goal,
        note=f"{before_kb / 1024:.0f} MiB before the seal",
    )  # fmt: skip


def make_journal(folder: Path, rate_hz: int, seconds: float, speed_mm_min: float, rows_per_feed: int) -> int:
    """The entries of a whole bar, by the real core on virtual time. Returns how many rows."""
    journal = Journal.create(folder, 9)
    waiting: list[Entry] = []
    sequence = 0

    def keep(entries: list[NewEntry]) -> None:
        nonlocal sequence
        for kind, monotonic_ns, payload in entries:
            sequence += 1
            waiting.append(Entry(kind, 9, sequence, monotonic_ns, payload))
        if len(waiting) >= 1_000:
            flush()

    def flush() -> None:
        journal.append_packed(pack_all(waiting))
        journal.sync()
        waiting.clear()

    loaded = Loaded(float(rate_hz), speed_mm_min=speed_mm_min, rows_per_feed=rows_per_feed, sink=keep)
    loaded.to_loading(net_n=15.0)
    until_s = loaded.now_s + seconds
    loaded.run_until(lambda: loaded.now_s >= until_s)
    loaded.break_bar()
    loaded.run_until(lambda: loaded.now_s >= until_s + 3.0)
    if waiting:
        flush()
    journal.close()
    return loaded.counter
