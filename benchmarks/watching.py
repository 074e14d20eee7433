"""Cost of the watch (limits, signal, fracture watch, stages) while LOADING, against the barest limit check there is.

Time in this process. One row at a time, as at 1 kHz: against a Python comparison of one number with two limits.
Blocks of 50 and 1000 rows, as at 50 kHz and when catching up, per million samples: against numpy scale, min and max
of the same block. The lane rises slowly and evenly with noise, so that nothing is decided: the usual case. The cost
of the decoder is given beside; and, of the deciding row alone, when the STOP is decided and when all that follows is
worked out.
"""

from __future__ import annotations

import gc
import time
from collections.abc import Callable

import numpy as np

from benchmarks import lane
from benchmarks.harness import Report, quantile
from benchmarks.loaded import Loaded
from benchmarks.rearmed_bench import twin
from daq.stream.block import Block
from daq.watch.values import State

NAME = "watching"
ROWS, ROWS_QUICK = 20_000, 3_000
SAMPLES, SAMPLES_QUICK = 1_000_000, 100_000


def run(report: Report) -> None:
    gc.collect()
    gc.disable()
    try:
        single(report, ROWS_QUICK if report.quick else ROWS)
        for rows in (50, 1_000):
            blocks(report, rows, SAMPLES_QUICK if report.quick else SAMPLES)
        deciding(report, 100 if report.quick else 1_000)
    finally:
        gc.enable()


def single(report: Report, rows: int) -> None:
    """Rows at 1 kHz through decoder, watch and entries, each part timed on its own."""
    loaded = Loaded(1_000.0).to_loading()
    core, clock = loaded.core, time.perf_counter_ns
    decoder, pipeline = core._decoders[0], core.pipeline
    decode_us, watch_us, bare_us = [], [], []
    low_n, high_n, outside = -10.0, 600.0, 0
    for _ in range(rows):
        data, now_s = loaded.next_row(), loaded.now_s
        t0 = clock()
        (block,) = decoder.feed(data, now_s).blocks
        t1 = clock()
        pipeline.advance(block, now_s)
        t2 = clock()
        gross_n = float(block.counts[0, 0]) * 0.016
        outside = 0 if low_n <= gross_n <= high_n else outside + 1
        t3 = clock()
        decode_us.append((t1 - t0) / 1e3)
        watch_us.append((t2 - t1) / 1e3)
        bare_us.append((t3 - t2) / 1e3)
    assert pipeline.state is State.LOADING, pipeline.state
    report.quantiles(
        NAME, "watch, one row at a time,", watch_us, "us", floor=bare_us, floor_name="bare comparison"
    )
    report.quantiles(NAME, "decoder (lines), one row at a time,", decode_us, "us")
    made = []
    for _ in range(rows):
        data, now_s = loaded.next_row(), loaded.now_s
        made.extend((block, now_s) for block in decoder.feed(data, now_s).blocks)
    mean_us = spent(lambda: [pipeline.advance(block, now_s) for block, now_s in made]) / len(made) * 1e6
    report.add(NAME, "watch, one row at a time, mean, warm", mean_us, "us", count=rows, goal="<= 25 us")


def blocks(report: Report, rows: int, samples: int) -> None:
    """Blocks at 50 kHz: the same lane, scripted directly as numbers."""
    rate_hz = 50_000.0
    loaded = Loaded(1_000.0).to_loading()
    frame = loaded.frame.model_copy(
        update={"links": (loaded.frame.links[0].model_copy(update={"rate_hz": rate_hz}),)}
    )
    fast = Loaded50(frame, rate_hz, rows)
    made = [fast.block() for _ in range(samples // rows)]
    watch_s = spent(lambda: fast.take(made))
    bare_s = spent(lambda: [bare(block) for block in made])
    per_million = 1e6 / samples
    report.add(
        NAME,
        f"watch, blocks of {rows} rows at 50 kHz, per million samples",
        watch_s * per_million,
        "s",
        floor=bare_s * per_million,
        floor_name="numpy min and max",
        count=samples,
        note=f"{samples / watch_s / 1e3:,.0f} kS/s; state {fast.state}",
    )


class Loaded50:
    """A pipeline brought to LOADING by blocks, with the lane as numpy columns."""

    def __init__(self, frame: object, rate_hz: float, rows: int) -> None:
        self._loaded = Loaded(rate_hz, frame=frame, rows_per_feed=rows).to_loading()  # type: ignore[arg-type]
        self._dice = np.random.default_rng(3)
        self._rows, self._rate_hz = rows, rate_hz
        self._index = 1 << 40
        self._now_s = self._loaded.now_s

    @property
    def state(self) -> str:
        return self._loaded.state.value

    def block(self) -> Block:
        machine, rows = self._loaded.machine, self._rows
        at_mm = machine.at_mm + machine.speed_mm_s / self._rate_hz * np.arange(rows)
        machine.at_mm += machine.speed_mm_s / self._rate_hz * rows
        noise_n = self._dice.normal(0.0, lane.NOISE_N, rows)
        force_n = lane.ZERO_N + noise_n + (at_mm - lane.GAP_MM) * machine.stiffness_n_mm
        counts = np.rint(np.column_stack((force_n / lane.FORCE_SCALE_N, at_mm / lane.POSITION_SCALE_MM)))
        time_s = self._now_s + np.arange(1, rows + 1) / self._rate_hz
        self._now_s = float(time_s[-1])
        self._index += rows
        return Block(0, self._index - rows, time_s, counts)

    def take(self, made: list[Block]) -> None:
        advance = self._loaded.core.pipeline.advance
        for block in made:
            advance(block, float(block.time_s[-1]))


def bare(block: Block) -> bool:
    values = block.counts[:, 0] * 0.016
    return bool(values.min() >= -10.0 and values.max() <= 600.0)


def spent(work: Callable[[], object]) -> float:
    begun = time.process_time()
    work()
    return time.process_time() - begun


def deciding(report: Report, events: int) -> None:
    """The deciding row alone, in the pure core, warm; and what the first row outside costs."""
    loaded = Loaded(1_000.0).to_loading()
    core, clock = loaded.core, time.perf_counter_ns
    first_us, second_us, decided_us = [], [], []
    for _ in range(events):
        for _ in range(5):
            loaded.feed(loaded.next_row())
        spare, at_mm = twin(core.pipeline), loaded.machine.at_mm
        for spent_us in (first_us, second_us):
            data = loaded.row_of(lane.OVER_N, at_mm)
            begun = clock()
            writes = core.received(0, data, loaded.now_ns)
            spent_us.append((clock() - begun) / 1e3)
            core.entries()
        assert writes and writes[0].urgent
        decided_us.append((loaded.decided_ns - begun) / 1e3)
        core.pipeline = spare
        assert core._motion is not None
        core._motion.reply(b"OK S", loaded.now_s)
    report.quantiles(NAME, "core, deciding row -> STOP decided,", decided_us, "us")
    report.add(NAME, "core, deciding row with all that follows, p50", quantile(second_us, 0.5), "us")
    report.add(NAME, "core, first row outside, p50", quantile(first_us, 0.5), "us")
