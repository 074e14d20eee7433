"""Weibull with bounds for 30 bars, the whole analysis, and a report of 30 sealed bars, from files to files.

Floors: scipy's fit of the same bars; reading the same files' bytes and hashing them.
"""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from benchmarks.harness import Report, least_s, scratch
from tests.made_series import made_series

NAME = "series"
BARS = 30
MS = 1e3


def run(report: Report) -> None:
    _weibull(report)
    with scratch(on_disk=True) as folder:
        _report(report, folder)


def _weibull(report: Report) -> None:
    from scipy import stats

    from daq.series.analysis import estimate

    strengths = list(400.0 * np.random.default_rng(1).weibull(12.0, BARS))
    survived = [250.0, 390.0]
    works: dict[str, Callable[[], object]] = {
        "complete": lambda: estimate("bars", strengths),
        "suspended": lambda: estimate("bars", strengths, survived),
        "scipy": lambda: stats.weibull_min.fit(strengths, floc=0),
    }
    found = least_s(works, 5 if report.quick else 15)
    for name in ("complete", "suspended"):
        words = f"Weibull with 90 and 95 % bounds, N = {BARS}, {name}"
        report.add(NAME, words, found[name] * MS, "ms", floor=found["scipy"] * MS, floor_name="ms scipy, fit only",
                   goal="<= 20 ms")  # fmt: skip


def _report(report: Report, folder: Path) -> None:
    from daq.cli.reporting import gather, write_report

    paths = made_series(folder / "records", BARS)
    begun = time.perf_counter()
    for path in paths:
        hashlib.sha256(path.read_bytes()).digest()
    floor_s = time.perf_counter() - begun
    for round_ in ("first, libraries cold", "second"):
        begun = time.perf_counter()
        series = gather(paths[0].parent)
        read_s = time.perf_counter() - begun
        list(write_report(series, folder / "out", force=True))
        whole_s = time.perf_counter() - begun
        report.add(NAME, f"report of {BARS} bars, {round_}", whole_s, "s", floor=floor_s, floor_name="s read and hash",
                   goal="<= 5 s", note=f"of it reading {read_s:.2f} s")  # fmt: skip
