"""Recomputation of sealed records, against reading them by bare means in the same run; and how two processors share it.

One record of 20 s at 1 kS/s, processor time, the shortest of several tries taken in turn with the floors: the whole
file read with h5py, its raw bytes parsed by bare numpy (numpy.loadtxt of the numbers, prefix and check already cut
off), and one plain pass over its entries. `midspan reduce` does all that, decodes with resynchronisation, checks,
numbering and times, plays the watch over it, reduces, and compares every bit.

Archive: as many records, named by hard links, in one process and in two. The floor of the speed-up is that of a bare
arithmetic loop in two processes in the same run: what this machine has to give at that moment.
"""

from __future__ import annotations

import io
import os
import time
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path

import h5py
import numpy as np

from benchmarks.harness import Report, least_s, scratch
from daq.recompute.many import recompute_all
from daq.recompute.one import recompute
from daq.recompute.source import Read, read_source
from daq.record.read import open_unchecked, stream_entries
from tests.recompute.made import broken_bar, sealed

NAME = "recomputing"
RECORDS, RECORDS_QUICK = 1_000, 60
LOOP = 20_000_000


def run(report: Report) -> None:
    with scratch(on_disk=True) as folder:
        one_record(report, folder / "one")
        archive(report, folder / "many", RECORDS_QUICK if report.quick else RECORDS)


def one_record(report: Report, folder: Path) -> None:
    folder.mkdir()
    record = sealed(folder, broken_bar(rate_hz=1000.0))[0]
    assert recompute(record).ok
    text = numbers_of(record)
    works: dict[str, Callable[[], object]] = {
        "reduce": lambda: recompute(record),
        "numbers": lambda: recompute(record, watch=False),
        "h5py": lambda: read_all(record),
        "numpy.loadtxt": lambda: np.loadtxt(io.StringIO(text), delimiter=","),
        "pass": lambda: plain_pass(record),
    }
    least = least_s(works, 3 if report.quick else 7)
    floors = ("h5py", "numpy.loadtxt", "pass")
    floor = sum(least[name] for name in floors)
    for name in floors:
        report.add(NAME, f"floor: {name}", 1e3 * least[name], "ms")
    rows = text.count("\n") + 1
    for name, words in (("numbers", "numbers only"), ("reduce", "the watch played too")):
        report.add(
            NAME,
            f"reduce 20 s at 1 kS/s, {words}",
            1e3 * least[name],
            "ms",
            floor=1e3 * floor,
            floor_name="their sum",
            count=rows,
            goal="<= 3 x",
        )


def numbers_of(record: Path) -> str:
    """The rows of the wire as bare numbers, one a line."""
    data = b"".join(item.data for item in read_source(record).items if isinstance(item, Read))
    lines = [line for line in data.split(b"\r\n") if line.startswith(b"D") and line.count(b",") == 3]
    return "\n".join(line[1:].rpartition(b",")[0].decode() for line in lines)


def read_all(record: Path) -> None:
    def look(_: str, item: object) -> None:  # anything but None would end the visit
        if isinstance(item, h5py.Dataset):
            item[()]

    with h5py.File(record) as file:
        file.visititems(look)


def plain_pass(record: Path) -> int:
    with open_unchecked(record) as file:
        return sum(1 for _ in stream_entries(file["stream"]))


# --- an archive


def archive(report: Report, folder: Path, count: int) -> None:
    folder.mkdir()
    record = sealed(folder, broken_bar())[0]
    records = []
    for number in range(count):
        records.append(folder / f"{number:06d}.h5")
        os.link(record, records[-1])
    spent = {jobs: wall_s(lambda jobs=jobs: reduce_all(records, jobs)) for jobs in (1, 2)}
    bare = {jobs: wall_s(lambda jobs=jobs: loops(jobs)) for jobs in (1, 2)}
    report.add(NAME, "records a second, one process", count / spent[1], "1/s", count=count)
    report.add(
        NAME,
        "speed-up by two processes",
        spent[1] / spent[2],
        "x",
        floor=bare[1] / bare[2],
        floor_name="bare loop",
        count=count,
        goal="near the bare loop's",
        note="start of the processes and their imports included",
    )


def reduce_all(records: Sequence[Path], jobs: int) -> None:
    assert all(found.ok for found in recompute_all(records, jobs=jobs))


def loops(jobs: int) -> None:
    """The same arithmetic, halved."""
    with ProcessPoolExecutor(jobs, mp_context=get_context("spawn")) as pool:
        list(pool.map(loop, [LOOP // jobs] * jobs))


def loop(turns: int) -> int:
    total = 0
    for turn in range(turns):
        total += turn & 3
    return total


def wall_s(work: Callable[[], object]) -> float:
    begin = time.perf_counter()
    work()
    return time.perf_counter() - begin
