"""Plays a plan on the virtual clock: person, machine and wire, the real core between them. Judges nothing.

What was done, what was refused and what the machine truly did is kept beside what midspan recorded.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, field
from enum import Enum

from daq.errors import Refused
from daq.watch.requests import (
    CloseRun,
    Jog,
    Note,
    Prove,
    Request,
    Reset,
    ReturnCrosshead,
    StartRun,
    StopRequest,
    TightenLimit,
)
from daq.watch.states import BROKEN, LATCHED
from daq.watch.values import State
from simulator.machine import Truth
from simulator.scenario import TICK_S, VirtualBench
from tests.scenarios.draw import Act, Deed, Moment, Plan
from tests.scenarios.world import bar, lay

READY_S_MAX = 25.0
CLOSED_S_MAX = 18.0  # beyond the planned time to the break: approach, seating, stops, tail
STALL_S = 4.0
SETTLE_S = 2.0


class Said(Enum):
    """How a request was answered."""

    OBEYED = "obeyed"
    REFUSED = "refused"
    DONE = "done"  # no request: hands, or the world


@dataclass(frozen=True, slots=True)
class Done:
    """One thing done at the bench. entry: how many entries there were before it."""

    time_s: float
    entry: int
    what: str
    said: Said
    missing: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Seen:
    """The machine's own truth at one instant."""

    time_s: float
    moving: bool
    position_mm: float
    force_n: float


@dataclass(slots=True)
class Player:
    """One scenario while it is played; afterwards the whole story."""

    plan: Plan
    bench: VirtualBench = field(init=False)
    done: list[Done] = field(default_factory=list)
    truths: list[Truth] = field(default_factory=list)
    path: list[Seen] = field(default_factory=list)
    cleared_s: float | None = None
    _waiting: list[Act] = field(init=False)
    _due: list[tuple[float, Act]] = field(default_factory=list)
    _reached: set[Moment] = field(default_factory=set)

    def __post_init__(self) -> None:
        self.bench = VirtualBench(self.plan.frame, self.plan.card, wake_s=self.plan.wake_s)
        self._waiting = list(self.plan.acts)

    def play(self) -> None:
        """The first loading, and where the plan says so a reset and a second one without misfortunes."""
        self.pass_time(0.6)
        self._load(1)
        self.pass_time(SETTLE_S)
        self._try_without_reset()
        if self.plan.again:
            self._mend()
            self._load(2)
            self.pass_time(SETTLE_S)

    # --- time
    def pass_time(self, seconds: float) -> None:
        self.until(lambda: False, seconds)

    def until(self, test: Callable[[], bool], timeout_s: float) -> bool:
        """Let time pass until the test holds, doing what is due meanwhile."""
        bench = self.bench
        end_s = bench.now_s + timeout_s
        while not test():
            if bench.now_s >= end_s:
                return False
            next_s = min((due_s for due_s, _ in self._due), default=end_s)
            bench.run_to(min(end_s, max(next_s, bench.now_s), bench.now_s + TICK_S))
            self._look()
            self._do_due()
        return True

    def _look(self) -> None:
        bench, machine = self.bench, self.bench.wire.machine
        self.truths += machine.take_truths()
        self.path.append(Seen(bench.now_s, machine.moving, machine.position_mm, machine.force_n))
        if self._waiting:
            self._note_moments()

    def _note_moments(self) -> None:
        state = self.bench.state
        if state in (State.IN_CONTACT, State.SEATING):
            self._reach(Moment.TOUCHED)
        elif state is State.LOADING:
            self._reach(Moment.LOADING)
        elif Moment.STARTED in self._reached and state in LATCHED | BROKEN:
            self._reach(Moment.ENDED)

    def _reach(self, moment: Moment) -> None:
        if moment in self._reached:
            return
        self._reached.add(moment)
        self._due += [(self.bench.now_s + act.delay_s, act) for act in self._waiting if act.moment is moment]
        self._waiting = [act for act in self._waiting if act.moment is not moment]

    def _do_due(self) -> None:
        due = [item for item in self._due if item[0] <= self.bench.now_s]
        self._due = [item for item in self._due if item[0] > self.bench.now_s]
        for _, act in sorted(due, key=lambda item: item[0]):
            self._act(act)

    # --- one loading
    def _load(self, loading: int) -> None:
        bench, plan = self.bench, self.plan
        specimen = plan.specimen if loading == 1 else bar(f"S-{loading}")
        lay(bench, specimen)
        self._note(f"lays bar {specimen.number}")
        self.until(lambda: not bench.wire.machine.moving, 20.0)
        run = bench.opening(plan.method, specimen, plan.fixture, loading=loading)
        if self.ask("opens the run", run) is Said.REFUSED:
            return
        self._reach(Moment.OPENED)
        self.until(lambda: bench.state is State.READY or bench.closed, READY_S_MAX)
        if bench.state is State.READY:
            self._reach(Moment.READY)
            self.pass_time(0.3)
            if self.ask("starts the run", StartRun()) is Said.OBEYED:
                self._reach(Moment.STARTED)
                self.until(lambda: bench.closed, CLOSED_S_MAX + self.plan.to_break_s)
        self._end_open_run()

    def _end_open_run(self) -> None:
        """A run that nobody has ended is ended by the person, as it would be at the end of a day."""
        bench = self.bench
        if not bench.closed:
            self.ask("closes the run at last", CloseRun("end of the scenario"))
            self.until(lambda: bench.closed, 10.0)

    def _try_without_reset(self) -> None:
        """What must be refused as long as a stop is latched. (Refusals are judged by the checks.)"""
        if self.bench.state in LATCHED:
            self.ask("tries to start without a reset", StartRun())
            self.ask("tries to jog without a reset", Jog(0.1, 1.0))
            self.ask("tries to return without a reset", ReturnCrosshead(0.1, 1.0))
            self.pass_time(0.3)

    def _mend(self) -> None:
        """The person puts right whatever went wrong, looks at the frame, and resets."""
        bench = self.bench
        for words in (
            {"clear": True},
            {"emergency_stop": "released"},
            {"shield": "shut"},
            {"drive": "sound"},
        ):
            bench.hands.do(json.dumps(words).encode())
        bench.recorder_acked_s = bench.station_heard_s = None
        self._waiting, self._due = [], []
        self.cleared_s = bench.now_s
        self._note("puts everything right")
        self.pass_time(2.5)
        self.ask("proves the polarity by hand", Prove("person", polarity=True, stop_drill=True))
        if bench.state in LATCHED | BROKEN:
            self.ask("looks at the frame and resets", Reset("person", looked=True))
        self.pass_time(0.3)

    # --- deeds
    def ask(self, what: str, request: Request) -> Said:
        """Ask the core, and keep the answer."""
        before, said, missing = len(self.bench.entries), Said.OBEYED, ()
        try:
            self.bench.request(request)
        except Refused as error:
            said, missing = Said.REFUSED, error.missing
        self.done.append(Done(self.bench.now_s, before, what, said, missing))
        return said

    def _note(self, what: str) -> None:
        self.done.append(Done(self.bench.now_s, len(self.bench.entries), what, Said.DONE))

    def _act(self, act: Act) -> None:
        requests: dict[Deed, Request] = {
            Deed.STOP: StopRequest("person"),
            Deed.NOTE: Note("chip flew left"),
            Deed.CLOSE: CloseRun("had enough"),
            Deed.START: StartRun(),
            Deed.JOG: Jog(act.value, 2.0),
            Deed.RETURN: ReturnCrosshead(act.value, 5.0),
            Deed.RESET: Reset("person"),
            Deed.TIGHTEN: TightenLimit("force_n_max", act.value * self.plan.expected.load_p50_n),
        }
        if act.deed in requests:
            self.ask(act.deed.value, requests[act.deed])
        else:
            self._happen(act)
            self._note(act.deed.value)

    def _happen(self, act: Act) -> None:
        bench = self.bench
        if act.deed is Deed.EMERGENCY:
            bench.hands.do(b'{"emergency_stop": "pressed"}')
        elif act.deed is Deed.SHIELD:
            bench.hands.do(b'{"shield": "open"}')
        elif act.deed is Deed.PANEL:
            bench.hands.do(b'{"raise": true}')
        elif act.deed is Deed.STALL:
            bench.stall(act.value)
        elif act.deed is Deed.STATION:
            bench.station_heard_s = bench.now_s
        else:
            assert act.deed is Deed.STOPPER
            bench.lose_stopper()
