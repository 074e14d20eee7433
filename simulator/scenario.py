"""Scenario: the whole stack but its processes on a virtual clock - machine, wire, decoders, watch, entries.

The same BenchCore as in the bench process, the same bytes as on a port; time runs as fast as the core can go. What a
process shell adds (real ports, ring, disk) is not here and is tested with real processes.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Any

from daq.bench.core import BenchCore, Health, NewEntry, Write
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import unpack_event
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import OpenRun, Request, StartRun
from daq.watch.values import State
from drivers.motion import MotionPort
from drivers.registry import decoder_for
from simulator.card import SimulatorCard
from simulator.hands import Hands
from simulator.virtual import VirtualWire

TICK_S = 0.01
NS = 1_000_000_000
STREAM_ID = 1


@dataclass(slots=True)
class VirtualBench:
    """One frame with everything around it. Keep it until the run is closed; then `entries` holds the whole story."""

    frame: FrameCard
    card: SimulatorCard
    clean_start: bool = True
    proven: Proven = field(default_factory=lambda: Proven(polarity=True, stop_drill=True))
    now_s: float = 0.0
    entries: list[Entry] = field(default_factory=list)
    health: Health = field(default_factory=lambda: Health(stopper_alive=True, recorder_silent_s=0.0))
    wire: VirtualWire = field(init=False)
    core: BenchCore = field(init=False)
    hands: Hands = field(init=False)
    events: list[dict[str, Any]] = field(default_factory=list)
    sent: list[tuple[float, bytes]] = field(default_factory=list)
    _ticked_s: float = field(init=False, default=0.0)
    _links_up: list[bool] = field(init=False)
    _last_heard_s: float = field(init=False, default=0.0)

    def __post_init__(self) -> None:
        self.wire = VirtualWire(self.frame, self.card)
        self.hands = Hands(self.wire, truthful=True)
        pipeline = Pipeline(self.frame, clean_start=self.clean_start, proven=self.proven)
        decoders = [decoder_for(self.frame, number) for number in range(len(self.frame.links))]
        motion = MotionPort(self.frame) if self.frame.motion is not None else None
        self.core = BenchCore(self.frame, pipeline, decoders, motion, origin_ns=0)
        self._links_up = [True] * len(self.frame.links)

    # --- time
    def run_to(self, until_s: float) -> None:
        """Let time pass, from byte to byte and tick to tick."""
        while self.now_s < until_s:
            due_s = min(until_s, self._ticked_s + TICK_S, max(self.wire.next_s(), self.now_s))
            self.now_s = max(due_s, self.now_s)
            for number in range(len(self.frame.links)):
                self._hear(number)
            if self.now_s >= self._ticked_s + TICK_S - 1e-12:
                self._ticked_s = self.now_s
                self._send(self.core.tick(self.now_ns, self.health))
            self._keep()

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
        """The recorder has acknowledged nothing for so long, as the bench process would see it."""
        self.health = Health(self.health.stopper_alive, silent_s)
        self._send(self.core.recorder_silence(silent_s, self.now_ns))
        self._keep()

    # --- what people do
    def request(self, request: Request) -> None:
        """Raises Refused."""
        self._send(self.core.request(request, self.now_ns))
        self._keep()

    def open_run(
        self, method: MethodCard, specimen: Specimen, fixture: str, *, loading: int = 1, **run: Any
    ) -> None:
        """Call the bar; tare follows by itself."""
        named = {
            "run_id": f"run-{specimen.number}-{loading}",
            "series": "scenario",
            "specimen": specimen.number,
            "loading": loading,
            "operator": "nobody",
            "utc": "2026-01-01T00:00:00.000+00:00",
            **run,
        }
        self.request(
            OpenRun(named, specimen.model_dump(mode="json"), method.model_dump(mode="json"), fixture)
        )

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
        names = [event["event"] for event in self.events if event["event"] in ("run_opened", "run_closed")]
        return bool(names) and names[-1] == "run_closed"

    def named(self, name: str) -> list[dict[str, Any]]:
        """All events of that name, in order."""
        return [event for event in self.events if event["event"] == name]

    # --- the shell's part
    def _hear(self, number: int) -> None:
        up = self.wire.connected(number)
        if up != self._links_up[number]:
            self._links_up[number] = up
            self._send(
                self.core.reopened(number, decoder_for(self.frame, number), self.now_ns)
                if up
                else self.core.fault("link_lost", self.frame.links[number].name, self.now_ns)
            )
        for arrival_s, data in self.wire.read(self.now_s, number):
            at_s = max(arrival_s, self._last_heard_s)
            self._last_heard_s = at_s
            self._send(self.core.received(number, data, round(at_s * NS)))

    def _send(self, writes: Iterable[Write]) -> None:
        for write in writes:
            self.sent.append((self.now_s, write.data))
            self.wire.write(write.data, self.now_s, write.link)

    def _keep(self) -> None:
        new: list[NewEntry] = self.core.entries()
        for kind, monotonic_ns, payload in new:
            entry = Entry(kind, STREAM_ID, len(self.entries) + 1, monotonic_ns, payload)
            self.entries.append(entry)
            if kind is Kind.EVENT:
                self.events.append(unpack_event(payload))
