"""A STOP that is written the moment it is decided: once, before its consequences, and nothing else changes."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import simulator
from daq.bench.core import BenchCore, Write
from daq.cards.frame import FrameCard
from daq.cards.load import example_path, load_frame, load_series
from daq.watch.requests import StartRun, TightenLimit
from daq.watch.values import State
from drivers.motion import MotionPort
from drivers.registry import decoder_for
from simulator.card import SimulatorCard, load_simulator
from simulator.scenario import VirtualBench

STOP = b"S\r\n"


class EarlyBench(VirtualBench):
    """Writes at once what it is told to, as the bench process does; `takes` says whether the output takes it."""

    takes = True

    def __post_init__(self) -> None:
        super().__post_init__()
        self.early: list[tuple[float, int]] = []
        self.judged_s: list[float] = []
        decoders = [decoder_for(self.frame, 0)]
        self.core = BenchCore(
            self.frame,
            self.core.pipeline,
            decoders,
            MotionPort(self.frame),
            origin_ns=0,
            at_once=self._at_once,
        )

    def _at_once(self, write: Write) -> bool:
        assert write.urgent and write.data == STOP
        self.early.append((self.now_s, len(self.core.pipeline._core.events)))
        self.judged_s.append(self.core.pipeline._core.clock_s)
        if self.takes:
            self.sent.append((self.now_s, write.data))
            self.core.sent(write.link, write.data, self.now_ns)
            self.wire.write(write.data, self.now_s, write.link)
        return self.takes


class FullBench(EarlyBench):
    takes = False


def loaded_to_a_limit(bench: VirtualBench) -> VirtualBench:
    """One bar up to a limit that is drawn down to below its load."""
    series = load_series(example_path("demo-series.toml"))
    specimen = series.specimens[0]
    mounted = bench.hands.do(json.dumps({"mount": specimen.model_dump(mode="json")}).encode())
    assert "mounted" in mounted, mounted
    bench.run_to(0.5)
    bench.open_run(series.method, specimen, series.card.fixture)
    assert bench.run_until(lambda: bench.state is State.READY, 20.0)
    bench.request(StartRun())
    assert bench.run_until(lambda: bench.state is State.LOADING, 60.0)
    bench.request(TightenLimit("force_n_max", 60.0))
    assert bench.run_until(lambda: bench.closed, 60.0)
    return bench


def machine() -> SimulatorCard:
    return load_simulator(Path(simulator.__file__).parent / "examples" / "alumina.toml")


def frame() -> FrameCard:
    return load_frame(example_path("kiln-lane-demo.toml"))


@pytest.mark.slow
def test_the_early_stop_changes_nothing_but_its_moment() -> None:
    plain = loaded_to_a_limit(VirtualBench(frame(), machine()))
    early = loaded_to_a_limit(EarlyBench(frame(), machine()))
    full = loaded_to_a_limit(FullBench(frame(), machine()))
    assert [event["row"] for event in plain.named("limit")] == [0]
    for other in (early, full):
        assert other.entries == plain.entries
        assert other.sent == plain.sent
    assert isinstance(early, EarlyBench) and isinstance(full, FullBench)
    stops = [at_s for at_s, data in plain.sent if data == STOP]
    assert len(stops) >= 2  # the touch of the approach, the limit
    assert [at_s for at_s, _ in early.early] == stops
    assert (
        list(dict.fromkeys(at_s for at_s, _ in full.early)) == stops
    )  # tried again when the row has been judged


@pytest.mark.slow
def test_the_early_stop_comes_before_its_events() -> None:
    early = loaded_to_a_limit(EarlyBench(frame(), machine()))
    assert isinstance(early, EarlyBench)
    assert early.early[0][1] == 0


@pytest.mark.slow
def test_a_limit_stops_on_the_row_that_passes_it_before_that_row_is_numbered_and_timed() -> None:
    early = loaded_to_a_limit(EarlyBench(frame(), machine()))
    assert isinstance(early, EarlyBench)
    (limit,) = early.named("limit")
    touch_s, limit_s = early.judged_s[:2]
    assert touch_s < limit_s < limit["time_s"]


@pytest.mark.slow
def test_rows_that_waited_are_told_in_the_order_of_time_when_a_limit_ends_the_wait() -> None:
    """Above 2 kHz the first row beyond a limit waits for the second."""
    card = frame()
    link = card.links[0].model_copy(update={"rate_hz": 4000.0, "speed_baud": 2_000_000})
    early = loaded_to_a_limit(VirtualBench(card.model_copy(update={"links": (link,)}), machine()))
    assert [event["row"] for event in early.named("limit")] == [0]
    times_ns = [entry.monotonic_ns for entry in early.entries]
    assert times_ns == sorted(times_ns)
