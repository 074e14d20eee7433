"""A BenchCore in LOADING on virtual time, in this process: bytes in, bytes and entries out, no ports."""

from __future__ import annotations

import random
import time
from collections.abc import Callable
from dataclasses import dataclass, field

from benchmarks import lane
from daq.bench.core import BenchCore, Health, NewEntry, Write
from daq.cards.frame import FrameCard
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import OpenRun, StartRun
from daq.watch.values import State
from drivers.motion import MotionPort
from drivers.registry import decoder_for

TICK_S = 0.01
HEALTH = Health(stopper_alive=True, recorder_silent_s=0.0)
NS = 1_000_000_000


@dataclass
class Loaded:
    """Frame, core and lane on one virtual clock."""

    rate_hz: float
    speed_mm_min: float = lane.SPEED_MM_MIN
    seed: int = 1
    frame: FrameCard | None = None
    rows_per_feed: int = 1
    core: BenchCore = field(init=False)
    machine: lane.Lane = field(init=False)
    sink: Callable[[list[NewEntry]], None] | None = None
    now_s: float = 1.0
    counter: int = 0
    stops: int = 0
    decided_ns: int = 0  # when the last STOP was decided, by time.perf_counter_ns
    _ticked_s: float = 0.0

    def __post_init__(self) -> None:
        self.frame = self.frame or lane.frame_card(self.rate_hz, "none")
        self.series = lane.slow_series(speed_mm_min=self.speed_mm_min)
        pipeline = Pipeline(self.frame, clean_start=True, proven=Proven(polarity=True, stop_drill=True))
        self.core = BenchCore(
            self.frame,
            pipeline,
            [decoder_for(self.frame, 0)],
            MotionPort(self.frame),
            origin_ns=0,
            at_once=self._note_stop,
        )
        stiffness = lane.stiffness_n_mm(self.frame, self.series)
        self.machine = lane.Lane(self.rate_hz, stiffness, random.Random(self.seed))

    def _note_stop(self, write: Write) -> bool:
        self.decided_ns = time.perf_counter_ns()
        return False

    @property
    def now_ns(self) -> int:
        return round(self.now_s * NS)

    @property
    def state(self) -> State:
        return self.core.pipeline.state

    def next_row(self) -> bytes:
        """The bytes of the next row; time moves on by one period."""
        force_n, at_mm = self.machine.row()
        return self.row_of(force_n, at_mm)

    def row_of(self, force_n: float, at_mm: float) -> bytes:
        data = lane.row_bytes(self.counter, force_n, at_mm)
        self.counter += 1
        self.now_s += 1.0 / self.rate_hz
        return data

    def feed(self, data: bytes) -> None:
        """Bytes arrive; ticks fall in between; the machine obeys; entries are thrown away."""
        self._obey(self.core.received(0, data, self.now_ns))
        if self.now_s - self._ticked_s >= TICK_S:
            self._ticked_s = self.now_s
            self._obey(self.core.tick(self.now_ns, HEALTH))
        entries = self.core.entries()
        if self.sink is not None and entries:
            self.sink(entries)

    def _obey(self, writes: list[Write]) -> None:
        for write in writes:
            replies, stops = self.machine.hear(write.data)
            self.stops += stops
            for reply in replies:
                self.core.received(0, reply, self.now_ns)

    def to_loading(self, net_n: float = 20.0) -> Loaded:
        """Open, tare, start, approach, seat, load up to that force."""
        self.run_until(lambda: self.now_s > 2.0)
        specimen, run = self.series.specimens[0], {"run_id": "r", "series": "s", "specimen": "1"}
        request = OpenRun(
            {**run, "loading": 1, "operator": "nobody", "utc": "2026-01-01T00:00:00.000+00:00"},
            specimen.model_dump(mode="json"),
            self.series.method.model_dump(mode="json"),
            lane.FIXTURE,
        )
        self._obey(self.core.request(request, self.now_ns))
        self.run_until(lambda: self.state is State.READY)
        self._obey(self.core.request(StartRun(), self.now_ns))
        self.run_until(lambda: self.state is State.LOADING and self.net_n >= net_n)
        return self

    @property
    def net_n(self) -> float:
        return float(self.core.pipeline.snapshot()["net_n"] or 0.0)  # type: ignore[arg-type]

    def break_bar(self) -> None:
        """Let the bar break now and go on until the run is closed."""
        self.machine.broken = True
        self.run_until(lambda: self.core.pipeline.run is None)

    def run_until(self, test: Callable[[], bool], timeout_s: float = 1_200.0) -> None:
        end_s = self.now_s + timeout_s
        while not test():
            assert self.now_s < end_s, f"stuck in state {self.state.value} at {self.net_n:.3g} N"
            for _ in range(max(1, int(self.rate_hz * TICK_S / self.rows_per_feed))):
                self.feed(b"".join(self.next_row() for _ in range(self.rows_per_feed)))
