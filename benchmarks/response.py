"""Limit passed: from the deciding row to the STOP, against bare loops that decide on the same bytes in the same run.

One instrument process paces the same rows on three ptys, a third of a period apart: the bench process with
everything around it (recorder, archivist with its live HDF5 file, station feeding three viewers), a bare Python loop
and, where there is a compiler, a plain C loop, all in the same scheduling class under the same load. Now and then it
sends two rows above the limit and measures from before the write of the second to after the read of the STOP: two
trips through the pseudo-terminal and whatever lies between. The bench is the real one, armed again after each STOP
(rearmed_bench.py). The in-process part (read of the deciding bytes -> STOP written) is measured inside it.
"""

from __future__ import annotations

import json
import os
import subprocess
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path

from benchmarks import lane
from benchmarks.daemon import Daemon, daemon, ended
from benchmarks.harness import (
    Report,
    Shares,
    compiled,
    compiler,
    processor_ticks,
    python_of,
    scratch,
    shares_since,
)
from benchmarks.instrument import Answers

NAME = "response"
SPACING_S = {1_000: 0.012, 5_000: 0.016, 10_000: 0.016}
EVENTS, EVENTS_QUICK = 20_000, 500
LIMIT_COUNTS = round(lane.METHOD_N_MAX / lane.FORCE_SCALE_N)
ORDERLY_STOPS = 1  # the touch at the end of the approach
GOALS = {"p50": "<= 1.3 x bare", "p99": "<= 2 x bare"}


def run(report: Report) -> None:
    events = EVENTS_QUICK if report.quick else EVENTS
    for rate_hz in (1_000, 5_000, 10_000):
        measure(report, rate_hz, events)


def measure(report: Report, rate_hz: int, events: int) -> None:
    """One rate: everything started, loaded, measured, ended."""
    with inside_file() as inside:
        answers, shares = served_events(rate_hz, events)
        told = json.loads(inside.read_text("ascii"))
    report.machine[f"{NAME} {rate_hz / 1000:g} kHz"] = shares
    bench_us, bare_us = answers.latency_us.get(0, []), answers.latency_us.get(1, [])
    label = f"limit -> STOP, {rate_hz / 1000:g} kHz,"
    load = f"idle {shares.idle:.0f} %, steal {shares.steal:.1f} %"
    report.quantiles(
        NAME,
        f"{label} bench",
        bench_us,
        "us",
        floor=bare_us,
        floor_name="bare Python",
        goals=GOALS,
        note=load,
    )
    if compiler():
        floor_us = answers.latency_us.get(2, [])
        report.quantiles(NAME, f"{label} bare Python", bare_us, "us", floor=floor_us, floor_name="plain C")
    report.quantiles(
        NAME, f"{label} in-process part", told["inside_us"], "us", floor=bare_us, floor_name="bare, whole"
    )
    report.add(NAME, f"{label} not answered within 1 s", answers.missed.get(0, 0), "events", count=events)
    unasked = len(answers.stops.get(0, []))
    report.add(NAME, f"{label} STOPs that no event asked for", unasked - ORDERLY_STOPS, "")


def served_events(rate_hz: int, events: int) -> tuple[Answers, Shares]:
    """What the instrument saw, and what the machine did meanwhile."""
    spacing_s = SPACING_S[rate_hz]
    with ExitStack() as stack:
        served = stack.enter_context(
            daemon(rate_hz, streams=3, spacing_s=spacing_s, bench_module="benchmarks.rearmed_bench")
        )
        for kind in ("python", "c"):
            stack.enter_context(bare_loop(kind, served))
        served.load()
        before = processor_ticks()
        served.instrument.begin(events)
        while not served.instrument.done(0.2):
            if not served.supervisor.look():
                raise RuntimeError("the bench process has ended")
        shares = shares_since(before)
        served.pump(0.3)
        return served.instrument.end(), shares


@contextmanager
def inside_file() -> Iterator[Path]:
    """Where the bench process writes what it measured inside itself."""
    with scratch() as folder:
        path = folder / "inside.json"
        os.environ["MIDSPAN_BENCH_INSIDE"] = str(path)
        try:
            yield path
        finally:
            del os.environ["MIDSPAN_BENCH_INSIDE"]


@contextmanager
def bare_loop(kind: str, served: Daemon) -> Iterator[None]:
    """The Python loop on the second pty, the C loop on the third (Python again where there is no compiler)."""
    program = compiled("bare", served.folder) if kind == "c" else None
    command: Sequence[str] = [str(program)] if program is not None else python_of("benchmarks.bare")
    device = served.instrument.devices[2 if kind == "c" else 1]
    with ended(subprocess.Popen([*command, device, str(LIMIT_COUNTS)])):
        yield
