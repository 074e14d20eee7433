"""Any cut of the stream gives the same answer: 200 random cuts per detector, scalar against vector, bit for bit."""

from __future__ import annotations

import itertools
from collections.abc import Iterator

import numpy as np
import pytest

from daq.cards.method import FractureSettings
from daq.stream.block import Block
from daq.watch.fracture import Finding, FractureWatch
from daq.watch.motion import Runaway
from daq.watch.noise import Level
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.repeats import Repeats
from daq.watch.requests import StartRun
from daq.watch.travel import Travel
from daq.watch.values import Event, State
from tests.watch.frames import FORCE_STEP_N, frame, method, open_run
from tests.watch.records import Case, Record, make

CUTS = 200


def busy_record(rate_hz: float, seed: int = 3, ramp_s: float = 3.0) -> Record:
    """A bit of everything."""
    return make(
        Case(
            seed=seed,
            stratum="busy",
            rate_hz=rate_hz,
            peak_n=460.0,
            sigma_n=0.3,
            ramp_s=ramp_s,
            slips=((0.4, 0.05),),
            pop_ins=((0.6, 0.08, 0.9),),
            glitches=((0.5, 200.0, 1), (0.8, -200.0, 2)),
            ring_hz=250.0,
            residual=0.2,
            residual_s=0.6,
            hum_hz=50.0,
            hum_n=0.5,
        )
    )


def pieces(total: int, largest: int, rng: np.random.Generator) -> Iterator[slice]:
    place = 0
    while place < total:
        end = min(total, place + int(rng.integers(1, largest + 1)))
        yield slice(place, end)
        place = end


# --- the fracture watch alone


def watch_of(rate_hz: float) -> FractureWatch:
    watch = FractureWatch(rate_hz, 0.3, FractureSettings(), 0.0)
    watch.watch(True, arm_n=20.0, gradual=True)
    return watch


def feed_all(watch: FractureWatch, times: np.ndarray, values: np.ndarray) -> list[Finding]:
    found = [
        watch.feed(i, t, x) for i, (t, x) in enumerate(zip(times.tolist(), values.tolist(), strict=True))
    ]
    return [f for f in found if f is not None]


def feed_cut(
    watch: FractureWatch, times: np.ndarray, values: np.ndarray, cut: Iterator[slice]
) -> list[Finding]:
    """Stretches where they can be proven quiet, samples elsewhere."""
    found: list[Finding | None] = []
    for part in cut:
        start = part.start
        while start < part.stop:
            stop = min(start + watch.level.room, part.stop)
            t, x = times[start:stop], values[start:stop]
            residuals = watch.quiet(t, x)
            if residuals is not None:
                found.append(watch.take(start, t, x, residuals))
            else:
                found += [
                    watch.feed(start + k, a, b)
                    for k, (a, b) in enumerate(zip(t.tolist(), x.tolist(), strict=True))
                ]
            start = stop
    return [f for f in found if f is not None]


def state_of(watch: FractureWatch) -> tuple[object, ...]:
    level = watch.level
    return (
        level.at_n,
        level.slope_n_s,
        level.sigma_n,
        level.limit_n,
        watch.envelope,
        watch.peak_raw,
        watch.highest,
    )


@pytest.mark.slow
def test_the_fracture_watch_does_not_see_cuts() -> None:
    record = busy_record(2000.0, ramp_s=1.2)
    busy = slice(round(1.6 * 2000), round(3.6 * 2000))
    record = Record(
        record.case, record.times_s[busy], record.counts[busy], 0.0, record.break_s, record.break_n
    )
    values = record.counts * FORCE_STEP_N
    reference = watch_of(2000.0)
    expected = feed_all(reference, record.times_s, values)
    assert len(expected) >= 5
    rng = np.random.default_rng(11)
    for n in range(CUTS // 4):
        watch = watch_of(2000.0)
        largest = (3, 40, 400, 4000)[n % 4]
        assert feed_cut(watch, record.times_s, values, pieces(len(values), largest, rng)) == expected
        assert state_of(watch) == state_of(reference)


@pytest.mark.slow
def test_the_fracture_watch_does_not_see_cuts_at_a_low_rate() -> None:
    record = busy_record(100.0)
    busy = slice(170, 600)
    times, values = record.times_s[busy], record.counts[busy] * FORCE_STEP_N
    reference = watch_of(100.0)
    expected = feed_all(reference, times, values)
    assert len(expected) >= 5
    rng = np.random.default_rng(12)
    for _ in range(CUTS):
        watch = watch_of(100.0)
        assert feed_cut(watch, times, values, pieces(len(values), 60, rng)) == expected
        assert state_of(watch) == state_of(reference)


# --- the smaller parts


def test_the_level_does_not_see_cuts() -> None:
    rng = np.random.default_rng(1)
    for rate_hz in (10.0, 1000.0, 10_000.0):
        times, values = np.arange(1, 1500) / rate_hz, rng.standard_normal(1499)
        residuals = rng.standard_normal(1499)
        whole = Level(rate_hz, 0.1)
        for t, x, r in zip(times.tolist(), values.tolist(), residuals.tolist(), strict=True):
            whole.add(t, x, r)
        for _ in range(20):
            cut = Level(rate_hz, 0.1)
            for part in pieces(1499, 200, rng):
                start = part.start
                while start < part.stop:
                    stop = min(start + cut.room, part.stop)
                    cut.add_many(*(a[start:stop].tolist() for a in (times, values, residuals)))
                    start = stop
            assert (cut.at_n, cut.slope_n_s, cut.sigma_n) == (whole.at_n, whole.slope_n_s, whole.sigma_n)
            assert (cut.pending_x, list(cut.history)) == (whole.pending_x, list(whole.history))


def test_repeats_do_not_see_cuts() -> None:
    rng = np.random.default_rng(2)
    counts = np.repeat(rng.integers(0, 3, 400), rng.integers(1, 6, 400)).astype(float)
    times = np.arange(len(counts)) * 0.001
    whole = Repeats()
    answers = [whole.feed(t, c) for t, c in zip(times.tolist(), counts.tolist(), strict=True)]
    for _ in range(CUTS):
        cut = Repeats()
        for part in pieces(len(counts), 30, rng):
            assert cut.longest(counts[part]) == max(answers[part])
            cut.take(times[part], counts[part])
        assert (cut.same, cut.since_s) == (whole.same, whole.since_s)


def test_travel_does_not_see_cuts() -> None:
    rng = np.random.default_rng(3)
    times, at = np.arange(3000) * 0.0007, np.cumsum(rng.standard_normal(3000))
    whole = Travel(1430.0, 0.0)
    for t, x in zip(times.tolist(), at.tolist(), strict=True):
        whole.feed(t, x)
    for _ in range(CUTS):
        cut = Travel(1430.0, 0.0)
        for part in pieces(3000, 300, rng):
            cut.feed_many(times[part], at[part])
        assert cut._points == whole._points
        assert (cut.at_mm, cut.top_mm, cut.speed_mm_s(0.3)) == (
            whole.at_mm,
            whole.top_mm,
            whole.speed_mm_s(0.3),
        )


def test_the_runaway_judge_does_not_see_cuts() -> None:
    rng = np.random.default_rng(4)
    values = np.cumsum(np.full(800, 0.03)) + 0.15 * rng.standard_normal(800) + 60.0
    whole = Runaway(30.0, 460.0, 0.15, 1000.0)
    for x in values.tolist():
        assert whole.judge(x, -1.0) is None
    for _ in range(CUTS):
        cut = Runaway(30.0, 460.0, 0.15, 1000.0)
        for part in pieces(800, 100, rng):
            assert cut.quiet(values[part])
            cut.take(values[part].tolist())
        assert cut._recent == whole._recent


# --- the whole pipeline


def through(record: Record, cut: list[slice], rate_hz: float) -> list[Event]:
    card = frame(
        rate_hz=rate_hz, position=False, inputs=("moving",), motion__gap_mm=50.0, motion__travel_mm_max=500.0
    )
    pipe = Pipeline(card, clean_start=True, proven=Proven(True, True))
    pipe.inputs({"moving": False}, 0.0)
    events: list[Event] = []
    started = False
    for part in cut:
        times, rows = record.times_s[part].copy(), record.counts[part].reshape(-1, 1).copy()
        events += pipe.advance(Block(0, part.start, times, rows), float(times[-1])).events
        if part.start == 0:
            events += pipe.request(
                open_run(method(rate__speed_mm_min=2.5), override="test"), float(times[-1])
            ).events
        if not started and pipe.state is State.READY:
            # given at the same sample whatever the cut: the record has an edge there
            events += pipe.request(StartRun(), float(times[-1])).events
            started = True
    return [e for e in events if e.name not in ("run_opened", "started")]


def cut_at(total: int, largest: int, edges: tuple[int, ...], rng: np.random.Generator) -> list[slice]:
    """Random pieces with edges where a person acts, so that the requests fall between the same samples."""
    marks = {0, total, *edges}
    place = 0
    while place < total:
        place += int(rng.integers(1, largest + 1))
        marks.add(min(place, total))
    ordered = sorted(marks)
    return [slice(a, b) for a, b in itertools.pairwise(ordered)]


def ready_at(record: Record, rate_hz: float) -> int:
    """The sample after which the pipeline is ready, found by going one by one."""
    events = through(record, [slice(n, n + 1) for n in range(len(record.times_s) // 3)], rate_hz)
    ready_s = next(e.time_s for e in events if e.name == "ready")
    return int(np.searchsorted(record.times_s, ready_s)) + 1


@pytest.mark.slow
@pytest.mark.parametrize(
    ("rate_hz", "cuts", "largest"), [(50.0, CUTS, 200), (1000.0, 12, 900), (10_000.0, 5, 9000)]
)
def test_the_pipeline_does_not_see_cuts(rate_hz: float, cuts: int, largest: int) -> None:
    record = busy_record(rate_hz, ramp_s=3.0 if rate_hz < 5000 else 1.5)
    total = len(record.times_s)
    edges = (1, ready_at(record, rate_hz))
    expected = through(record, [slice(0, 1), *(slice(n, n + 1) for n in range(1, total))], rate_hz)
    assert {e.name for e in expected} >= {"fracture", "glitch", "after_zero", "run_closed"}
    rng = np.random.default_rng(5)
    for n in range(cuts):
        cut = cut_at(total, largest if n % 2 else 50, edges, rng)
        assert through(record, cut, rate_hz) == expected
