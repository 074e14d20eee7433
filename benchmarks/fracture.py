"""Fracture: from the drop of the force to the STOP, in data time and in processing time, apart from the limit path.

A scripted force falls at once to a small rest at a random moment between two samples, at several loads and with noise;
the same decoder, watch and core as in the bench process, on virtual time, one row at a time. The delay in data time is
from the drop to the sample that decided; the processing time is from this sample's bytes to the STOP, which is
written at that moment. The floor is one confirming window (10 ms or 3 samples): no rule that confirms can be faster.
"""

from __future__ import annotations

import gc
import random
import time

from benchmarks import lane
from benchmarks.harness import Report, quantile
from benchmarks.loaded import Loaded
from benchmarks.rearmed_bench import twin

NAME = "fracture"
BREAKS, BREAKS_QUICK = 1_000, 60
REST_SHARE = 0.05
GOALS_MS = {1_000: "median <= 12 ms", 100: "median <= 30 ms"}
CONFIRM_S, CONFIRM_SAMPLES = 0.010, 3


def run(report: Report) -> None:
    breaks = BREAKS_QUICK if report.quick else BREAKS
    gc.collect()
    gc.disable()
    try:
        for rate_hz in (1_000, 100):
            measure(report, rate_hz, breaks)
    finally:
        gc.enable()


def measure(report: Report, rate_hz: int, breaks: int) -> None:
    loaded = Loaded(float(rate_hz), speed_mm_min=0.2).to_loading(net_n=30.0)
    loaded.stops = 0  # the touch of the approach
    dice = random.Random(4)
    delays_ms, processing_us, early = [], [], 0
    for _ in range(breaks):
        for _ in range(dice.randint(3, 12)):
            loaded.feed(loaded.next_row())
        early += loaded.stops
        spare, at_mm, speed = twin(loaded.core.pipeline), loaded.machine.at_mm, loaded.machine.speed_mm_s
        delay_s, spent_us = break_once(loaded, dice.random() / rate_hz)
        delays_ms.append(delay_s * 1e3)
        processing_us.append(spent_us)
        loaded.core.pipeline, loaded.stops = spare, 0
        loaded.machine.at_mm, loaded.machine.speed_mm_s = at_mm, speed
        assert loaded.core._motion is not None
        loaded.core._motion._pending.clear()
        if loaded.net_n > 380.0:
            loaded = Loaded(float(rate_hz), speed_mm_min=0.2, seed=len(delays_ms)).to_loading(net_n=30.0)
            loaded.stops = 0
    window_ms = 1e3 * max(CONFIRM_S, CONFIRM_SAMPLES / rate_hz)
    label = f"drop -> deciding sample, {rate_hz} Hz,"
    floor = [window_ms] * len(delays_ms)
    report.quantiles(
        NAME,
        label,
        delays_ms,
        "ms",
        floor=floor,
        floor_name="confirming window",
        goals={"p50": GOALS_MS[rate_hz]},
    )
    report.add(NAME, f"deciding bytes -> STOP decided, {rate_hz} Hz, p50", quantile(processing_us, 0.5), "us")
    report.add(
        NAME, f"deciding bytes -> STOP decided, {rate_hz} Hz, p99", quantile(processing_us, 0.99), "us"
    )
    report.add(NAME, f"stops before any drop, {rate_hz} Hz", early, "", count=breaks)


def break_once(loaded: Loaded, after_s: float) -> tuple[float, float]:
    """(delay in data time, processing time of the deciding call in us) of one break after_s past the last sample."""
    broke_s = loaded.now_s + after_s
    machine = loaded.machine
    for _ in range(int(loaded.rate_hz) + 100):
        force_n, at_mm = machine.row()
        bar_n = force_n - lane.ZERO_N
        data = loaded.row_of(lane.ZERO_N + REST_SHARE * bar_n + machine.dice.gauss(0.0, lane.NOISE_N), at_mm)
        begun = time.perf_counter_ns()
        writes = loaded.core.received(0, data, loaded.now_ns)
        if any(write.urgent for write in writes):
            spent_us = (loaded.decided_ns - begun) / 1e3
            loaded.core.entries()
            return loaded.now_s - broke_s, spent_us
        loaded.core.entries()
    raise AssertionError("a break was missed")
