"""A closed loop for tests: a very small machine that obeys Stop and Move, and the Pipeline that watches it.

The machine is kinematic: crosshead with a stop latency, a bar with a toe that breaks at a given load, and a list of
disturbances added to force or counts at given times. The real simulator lives in `simulator`; this one only has to
be obvious.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.stream.block import Block
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import Request, StartRun
from daq.watch.values import Action, Event, Move, MoveKind, State, Step, Stop
from tests.watch.frames import FORCE_STEP_N, POSITION_STEP_MM, frame, open_run

Disturb = Callable[[float, float], float]


@dataclass
class Machine:
    """A bar on rollers under a crosshead."""

    gap_mm: float = 2.0
    stiffness_n_mm: float = 3370.0
    toe_mm: float = 0.004
    strength_n: float = 460.0
    residual_share: float = 0.0
    latency_s: float = 0.15
    deaf: bool = False
    reversed_force: bool = False
    at_mm: float = 0.0
    speed_mm_s: float = 0.0
    broken: bool = False
    broke_s: float = float("inf")
    broke_n: float = float("nan")
    _stop_s: float = float("inf")
    _until_mm: float | None = None

    def obey(self, action: Action, now_s: float) -> None:
        if self.deaf:
            return
        if isinstance(action, Stop):
            self._stop_s = min(self._stop_s, now_s + self.latency_s)
        else:
            self._stop_s = float("inf")
            self.speed_mm_s = action.speed_mm_min / 60.0
            returns = action.kind in (MoveKind.RETURN, MoveKind.JOG) and action.distance_mm is not None
            sign = 1.0 if self.speed_mm_s > 0 else -1.0
            self._until_mm = self.at_mm + sign * (action.distance_mm or 0.0) if returns else None

    def step(self, now_s: float, period_s: float) -> float:
        """Move on by one sample; the force on the bar."""
        if now_s >= self._stop_s:
            self.speed_mm_s = 0.0
        self.at_mm += self.speed_mm_s * period_s
        if self._until_mm is not None and (self.at_mm - self._until_mm) * self.speed_mm_s >= 0:
            self.speed_mm_s = 0.0
        force = self._force()
        if not self.broken and force >= self.strength_n:
            self.broken, self.broke_s, self.broke_n = True, now_s, force
            force = self.residual_share * force
        return -force if self.reversed_force else force

    @property
    def force_n(self) -> float:
        """On the bar now."""
        return self._force()

    def _force(self) -> float:
        into_mm = self.at_mm - self.gap_mm
        if into_mm <= 0:
            return 0.0
        if self.broken:
            return self.residual_share * self.strength_n
        if into_mm < 2 * self.toe_mm:
            return self.stiffness_n_mm * into_mm**2 / (4 * self.toe_mm)
        return self.stiffness_n_mm * (into_mm - self.toe_mm)


@dataclass
class Rig:
    """Pipeline and machine on one virtual clock."""

    card: FrameCard = field(default_factory=frame)
    machine: Machine = field(default_factory=Machine)
    noise_n: float = 0.15
    seed: int = 1
    clean_start: bool = True
    proven: Proven = field(default_factory=lambda: Proven(True, True))
    disturb: Callable[[float, float], float] | None = None
    count_of: Callable[[float, float], float] | None = None
    position_of: Callable[[float, float], float] | None = None
    samples_per_block: int = 5
    silent: bool = False
    on_step: Callable[[Step], None] | None = None

    def __post_init__(self) -> None:
        self.pipe = Pipeline(self.card, clean_start=self.clean_start, proven=self.proven)
        self.rng = np.random.default_rng(self.seed)
        self.rate_hz = self.card.links[0].rate_hz
        self.now_s, self.index = 0.0, 0
        self.events: list[Event] = []
        self.actions: list[tuple[float, Action]] = []
        self.columns = len(self.card.channels)
        self._missing = 0

    def run_for(self, seconds: float) -> Rig:
        return self.run_until(lambda: False, seconds)

    def run_until(self, done: Callable[[], bool], seconds_max: float = 60.0) -> Rig:
        end_s = self.now_s + seconds_max
        period_s = 1.0 / self.rate_hz
        while self.now_s < end_s - 1e-9 and not done():
            count = min(self.samples_per_block, max(1, round((end_s - self.now_s) * self.rate_hz)))
            times, rows = [], []
            for _ in range(count):
                self.now_s = round((self.index + 1) * period_s, 9)
                times.append(self.now_s)
                rows.append(self._row(period_s))
                self.index += 1
            block = None
            if not self.silent:
                block = Block(0, self.index - count, np.array(times), np.array(rows), self._missing)
                self._missing = 0
            self.take(self.pipe.advance(block, self.now_s))
        return self

    def _row(self, period_s: float) -> list[float]:
        force = self.machine.step(self.now_s, period_s)
        if self.disturb is not None:
            force = self.disturb(self.now_s, force)
        force += self.noise_n * self.rng.standard_normal()
        count = float(np.round(force / FORCE_STEP_N)) if np.isfinite(force) else force
        if self.count_of is not None:
            count = self.count_of(self.now_s, count)
        at = self.machine.at_mm
        if self.position_of is not None:
            at = self.position_of(self.now_s, at)
        position = float(np.round(at / POSITION_STEP_MM)) if np.isfinite(at) else at
        return [count, position][: self.columns]

    def take(self, step: Step) -> Step:
        if self.on_step is not None:
            self.on_step(step)
        for action in step.actions:
            self.actions.append((self.now_s, action))
            self.machine.obey(action, self.now_s)
        self.events += step.events
        return step

    def ask(self, request: Request) -> Step:
        return self.take(self.pipe.request(request, self.now_s))

    def skip(self, samples: int) -> None:
        """So many samples never arrive, and the next block says so."""
        for _ in range(samples):
            self.index += 1
            self.now_s = round(self.index / self.rate_hz, 9)
            self._row(1.0 / self.rate_hz)
        self._missing = samples

    def inputs(self, **values: bool | None) -> Step:
        return self.take(self.pipe.inputs(values, self.now_s))

    def fault(self, name: str, detail: str = "") -> Step:
        return self.take(self.pipe.fault(name, detail, self.now_s))

    # --- common beginnings

    def ready(self, card: MethodCard | None = None, **open_changes: str) -> Rig:
        self.run_for(0.3)
        self.ask(open_run(card, **open_changes))  # type: ignore[arg-type]
        return self.run_until(lambda: self.pipe.state is State.READY, 6.0)

    def started(self, card: MethodCard | None = None) -> Rig:
        self.ready(card)
        self.ask(StartRun())
        return self

    def loading(self, card: MethodCard | None = None, load_n: float = 100.0) -> Rig:
        """Under way, with that much load on the bar."""
        self.started(card)
        return self.run_until(
            lambda: self.pipe.state is State.LOADING and (self.pipe.snapshot()["net_n"] or 0) >= load_n
        )

    def to_close(self, seconds_max: float = 60.0) -> Rig:
        return self.run_until(lambda: bool(self.named("run_closed")), seconds_max)

    # --- looking at what happened

    def named(self, name: str) -> list[Mapping[str, object]]:
        return [event.fields for event in self.events if event.name == name]

    def times(self, name: str) -> list[float]:
        return [event.time_s for event in self.events if event.name == name]

    def one(self, name: str) -> Mapping[str, object]:
        found = self.named(name)
        assert len(found) == 1, (name, found, [e.name for e in self.events])
        return found[0]

    def rows(self) -> list[object]:
        return [fields["row"] for fields in self.named("limit")]

    def stops(self) -> list[float]:
        return [at for at, action in self.actions if isinstance(action, Stop)]

    def moves(self) -> list[Move]:
        return [action for _, action in self.actions if isinstance(action, Move)]
