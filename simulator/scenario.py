"""Scenario: the whole stack but its processes on a virtual clock - machine, wire, decoders, watch, entries.

The same BenchCore as in the bench process, the same bytes as on a port; time runs as fast as the core can go. What a
process shell adds (real ports, ring, disk) is not here and is tested with real processes; of the shell's own duties
those that decide something are here too: a lost link is opened again after a second, never while a run is armed; the
recorder's and the station's silence are judged at every tick.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Any

from daq.bench.core import BenchCore, Health, Write
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import unpack_event
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import OpenRun, Request, StartRun
from daq.watch.values import State
from drivers.links import start_bytes
from drivers.motion import MotionPort
from drivers.registry import decoder_for
from simulator.card import SimulatorCard
from simulator.hands import Hands
from simulator.virtual import VirtualWire

TICK_S = 0.01
REOPEN_S = 1.0
STATION_SILENT_S = 1.0
NS = 1_000_000_000
STREAM_ID = 1


@dataclass(slots=True)
class VirtualBench:
    """One frame with everything around it. Keep it until the run is closed; then `entries` holds the whole story.

    wake_s: the bench wakes for data at most this often and then takes all that has come, as a loop does that
    coalesces; 0: it wakes for every arrival.
    """

    frame: FrameCard
    card: SimulatorCard
    clean_start: bool = True
    proven: Proven = field(default_factory=lambda: Proven(polarity=True, stop_drill=True))
    wake_s: float = 0.0
    now_s: float = 0.0
    stopper_alive: bool = True
    recorder_acked_s: float | None = None  # since when the recorder is silent; None: it acknowledges
    station_heard_s: float | None = None  # since when the station is silent; None: it is there
    entries: list[Entry] = field(default_factory=list)
    wire: VirtualWire = field(init=False)
    core: BenchCore = field(init=False)
    hands: Hands = field(init=False)
    events: list[dict[str, Any]] = field(default_factory=list)
    sent: list[tuple[float, bytes]] = field(default_factory=list)
    _due_s: float = field(init=False, default=TICK_S)
    _woken_s: float = field(init=False, default=0.0)
    _next_sequence: int = field(init=False, default=1)
    _lost_s: dict[int, float] = field(init=False, default_factory=dict)

    def __post_init__(self) -> None:
        self.wire = VirtualWire(self.frame, self.card)
        self.hands = Hands(self.wire, truthful=True)
        pipeline = Pipeline(self.frame, clean_start=self.clean_start, proven=self.proven)
        decoders = [decoder_for(self.frame, number) for number in range(len(self.frame.links))]
        motion = MotionPort(self.frame) if self.frame.motion is not None else None
        self.core = BenchCore(self.frame, pipeline, decoders, motion, origin_ns=0, at_once=self._leave)
        for number in range(len(self.frame.links)):
            self._opened(number)
        self._keep()

    # --- time
    def run_to(self, until_s: float) -> None:
        """Let time pass, from arrival to arrival and tick to tick."""
        links = range(len(self.frame.links))
        while self.now_s < until_s:
            wake_s = max(self.wire.next_s(), self._woken_s + self.wake_s)
            self.now_s = max(min(until_s, self._due_s, wake_s), self.now_s)
            for number in links:
                self._hear(number)
            if self.now_s >= self._due_s - 1e-12:
                self._due_s = self.now_s + TICK_S
                self._tick()

    def run_until(self, test: Callable[[], bool], timeout_s: float) -> bool:
        """Let time pass until the test holds; False when it did not within the time."""
        end_s = self.now_s + timeout_s
        while not test():
            if self.now_s >= end_s:
                return False
            self.run_to(min(end_s, self.now_s + TICK_S))
        return True

    @property
    def now_ns(self) -> int:
        return round(self.now_s * NS)

    def stall(self, silent_s: float) -> None:
        """The recorder has acknowledged nothing for so long, and goes on so until recorder_acked_s is None again."""
        self.recorder_acked_s = self.now_s - silent_s
        self._judge_neighbours()

    def lose_stopper(self) -> None:
        """The stopper process has died."""
        self.stopper_alive = False
        self._obey(self.core.fault("stopper_lost", "the stopper process has gone", self.now_ns))

    # --- what people do
    def request(self, request: Request) -> None:
        """Raises Refused."""
        self._obey(self.core.request(request, self.now_ns))

    def opening(
        self, method: MethodCard, specimen: Specimen, fixture: str, *, loading: int = 1, **run: Any
    ) -> OpenRun:
        """The request that calls the bar."""
        named = {
            "run_id": f"run-{specimen.number}-{loading}",
            "series": "scenario",
            "specimen": specimen.number,
            "loading": loading,
            "operator": "nobody",
            "utc": "2026-01-01T00:00:00.000+00:00",
            **run,
        }
        return OpenRun(named, specimen.model_dump(mode="json"), method.model_dump(mode="json"), fixture)

    def open_run(self, method: MethodCard, specimen: Specimen, fixture: str, *, loading: int = 1) -> None:
        """Call the bar; tare follows by itself."""
        self.request(self.opening(method, specimen, fixture, loading=loading))

    def break_bar(
        self, method: MethodCard, specimen: Specimen, fixture: str, *, timeout_s: float = 300.0
    ) -> bool:
        """Open, tare, start, wait for the end. False when the run was not closed in time."""
        self.open_run(method, specimen, fixture)
        if not self.run_until(lambda: self.state is State.READY or self.closed, 20.0) or self.closed:
            return self.closed
        self.request(StartRun())
        return self.run_until(lambda: self.closed, timeout_s)

    @property
    def state(self) -> State:
        return self.core.pipeline.state

    @property
    def closed(self) -> bool:
        """Whether the last opened run has been closed."""
        return self.core.pipeline.run is None and any(e["event"] == "run_closed" for e in self.events)

    def named(self, name: str) -> list[dict[str, Any]]:
        """All events of that name, in order."""
        return [event for event in self.events if event["event"] == name]

    # --- the shell's part
    def _hear(self, number: int) -> None:
        arrived = self.wire.read(self.now_s, number)
        if self.wire.connected(number) == (number in self._lost_s):
            self._plug(number)
        if arrived and number not in self._lost_s:
            data = arrived[0][1] if len(arrived) == 1 else b"".join(data for _, data in arrived)
            self._woken_s = self.now_s
            self._obey(self.core.received(number, data, self.now_ns))

    def _plug(self, number: int) -> None:
        """The port has vanished, or is there again."""
        if number not in self._lost_s:
            self._lost_s[number] = self.now_s
            self._obey(self.core.lost(number, "unplugged", self.now_ns))
        elif self.now_s >= self._lost_s[number] + REOPEN_S and not self.core.pipeline.armed:
            del self._lost_s[number]
            self._obey(self.core.reopened(number, decoder_for(self.frame, number), self.now_ns))
            self._opened(number)
            self._keep()

    def _opened(self, number: int) -> None:
        """The port is open: what its card sends at opening is sent."""
        start = start_bytes(self.frame.links[number])
        self.core.opened(number, start, self.now_ns)
        if start:
            self.wire.write(start, self.now_s, number)

    def _tick(self) -> None:
        self._obey(self.core.tick(self.now_ns, Health(self.stopper_alive, self._recorder_silent_s())))
        self._judge_neighbours()

    def _judge_neighbours(self) -> None:
        pipeline, heard_s = self.core.pipeline, self.station_heard_s
        self._obey(self.core.recorder_silence(self._recorder_silent_s(), self.now_ns))
        at_stake = pipeline.armed or pipeline.moving
        if at_stake and heard_s is not None and self.now_s - heard_s > STATION_SILENT_S:
            self._obey(self.core.fault("station_silent", "the station has been silent for 1 s", self.now_ns))

    def _recorder_silent_s(self) -> float:
        return 0.0 if self.recorder_acked_s is None else self.now_s - self.recorder_acked_s

    def _obey(self, writes: Iterable[Write]) -> None:
        """Stop first, then tell."""
        for write in writes:
            self._leave(write)
        self._keep()

    def _leave(self, write: Write) -> bool:
        """The bytes leave, where there is a port."""
        if write.link in self._lost_s:
            return False
        self.sent.append((self.now_s, write.data))
        self.core.sent(write.link, write.data, self.now_ns)
        self.wire.write(write.data, self.now_s, write.link)
        return True

    def _keep(self) -> None:
        while batch := self.core.entries():
            for kind, monotonic_ns, payload in batch:
                self.entries.append(Entry(kind, STREAM_ID, self._next_sequence, monotonic_ns, payload))
                self._next_sequence += 1
                if kind is Kind.EVENT:
                    self.events.append(unpack_event(payload))
