"""A model of person and machine against the pipeline: whatever is asked, stop wins and reset restarts nothing."""

from __future__ import annotations

import json
import math

import hypothesis.strategies as st
import pytest
from hypothesis import HealthCheck, settings
from hypothesis.stateful import RuleBasedStateMachine, invariant, precondition, rule

from daq.errors import Refused
from daq.watch.catalogue import EVENTS
from daq.watch.faults import FAULTS
from daq.watch.requests import (
    CloseRun,
    Jog,
    OpenRun,
    Request,
    Reset,
    ReturnCrosshead,
    StartRun,
    StopRequest,
    TightenLimit,
)
from daq.watch.states import BROKEN, LATCHED, MOVING
from daq.watch.values import Event, Move, MoveKind, State, Step, Stop
from tests.watch.frames import frame, method, open_run
from tests.watch.rig import Machine, Rig

INPUTS = ("shield_open", "emergency_stop", "drive_fault", "end_down", "moving")
DELIBERATE = {MoveKind.APPROACH: StartRun, MoveKind.JOG: Jog}


class PersonAndMachine(RuleBasedStateMachine):
    """Random hands on a bench that runs 50 samples a second."""

    def __init__(self) -> None:
        super().__init__()
        card = frame(rate_hz=50.0, motion__gap_mm=0.05, motion__backoff_auto=True, inputs=INPUTS)
        self.rig = Rig(card, Machine(gap_mm=0.02, strength_n=200.0), clean_start=False)
        self.rig.samples_per_block = 1
        self.bars = 0
        self.latched = True  # unclean start
        self.run_alive = False
        self.ceiling_n = math.inf
        self.request: Request | None = None
        self.rig.on_step = self.took

    # --- what is checked at every step

    def took(self, step: Step) -> None:
        request = self.request
        assert all(event.name in EVENTS for event in step.events)
        stops = [n for n, action in enumerate(step.actions) if isinstance(action, Stop)]
        for n, action in enumerate(step.actions):
            if isinstance(action, Move):
                self._may_move(action, request)
                assert not any(n > at for at in stops), "a move after a stop in one step"
        if isinstance(request, StopRequest):
            assert stops, "a stop request without a stop"
        for event in step.events:
            self._heard(event)

    def _may_move(self, move: Move, request: Request | None) -> None:
        assert not self.latched, f"{move} after a stop without a reset"
        if move.kind in DELIBERATE:
            assert isinstance(request, DELIBERATE[move.kind])
        elif move.kind is MoveKind.RETURN:
            assert isinstance(request, ReturnCrosshead | Jog) or self.rig.machine.broken
        else:
            assert self.run_alive, "loading without a started run"

    def _heard(self, event: Event) -> None:
        fields = event.fields
        if event.name == "state":
            after = State(fields["to"])
            self.latched = after in LATCHED
            assert not (after in MOVING and State(fields["from"]) in LATCHED)
        elif event.name == "started":
            self.run_alive = True
        elif event.name in ("run_closed", "fracture"):
            self.run_alive = False
        elif event.name == "run_opened":
            self.ceiling_n = math.inf
        elif event.name == "limits":
            self.ceiling_n = self.force_n_max()

    def ask(self, request: Request) -> None:
        before = self.rig.pipe.state
        self.request = request
        try:
            self.rig.ask(request)
        except Refused:
            left = self.rig.pipe.fault_over("nothing", self.rig.now_s)
            refused_cleanly = self.rig.pipe.state is before and not left.actions and not left.events
        else:
            refused_cleanly = True
        assert refused_cleanly, "refused, yet something was decided"
        self.request = None

    def force_n_max(self) -> float:
        return float(self.rig.pipe.snapshot()["force_n_max"])  # type: ignore[arg-type]

    # --- hands

    @rule(seconds=st.sampled_from([0.02, 0.1, 0.5, 1.5]))
    def time_goes_on(self, seconds: float) -> None:
        self.rig.run_for(seconds)

    @rule()
    def stop(self) -> None:
        self.ask(StopRequest())

    @rule(tighten=st.booleans())
    def open_run(self, tighten: bool) -> None:
        self.bars += 1
        if self.rig.machine.broken and self.rig.pipe.run is None:
            self.rig.machine.broken = False  # the next bar
        self.ask(open_run(method(rate__speed_mm_min=2.0), number=str(self.bars)))
        if tighten:
            self.ask(TightenLimit("force_n_max", 400.0))

    @rule()
    def start(self) -> None:
        self.ask(StartRun())

    @rule(looked=st.booleans())
    def reset(self, looked: bool) -> None:
        self.ask(Reset(who="x", looked=looked))

    @rule()
    def close(self) -> None:
        self.ask(CloseRun(reason="wanted"))

    @rule(distance=st.sampled_from([-0.05, 0.02, 0.2]), speed=st.sampled_from([1.0, 50.0]))
    def jog(self, distance: float, speed: float) -> None:
        self.ask(Jog(distance, speed))

    @rule()
    def go_back(self) -> None:
        self.ask(ReturnCrosshead(0.05, 10.0))

    @rule(value=st.sampled_from([1.0, 300.0, 1e6, math.nan, -5.0]))
    def limit(self, value: float) -> None:
        before = self.force_n_max()
        self.ask(TightenLimit("force_n_max", value))
        assert self.force_n_max() <= before

    @rule(name=st.sampled_from(INPUTS), value=st.sampled_from([True, False, False, None]))
    def status(self, name: str, value: bool | None) -> None:
        self.rig.inputs(**{name: value})

    @rule()
    def all_inputs_well(self) -> None:
        self.rig.inputs(**dict.fromkeys(INPUTS, False))

    @rule(name=st.sampled_from([n for n, r in FAULTS.items() if not r.blocks_start]))
    def fault(self, name: str) -> None:
        self.rig.fault(name)

    @rule(deaf=st.booleans(), silent=st.booleans())
    def trouble(self, deaf: bool, silent: bool) -> None:
        self.rig.machine.deaf, self.rig.silent = deaf, silent

    @precondition(lambda self: self.rig.pipe.run is None)
    @rule()
    def peace(self) -> None:
        """Everything well again, so that deep states can be reached."""
        self.rig.machine.deaf = self.rig.silent = False
        self.all_inputs_well()
        self.rig.run_for(1.0)
        self.ask(Reset(who="x", looked=True))
        self.ask(ReturnCrosshead(0.2, 50.0))
        self.rig.run_for(1.0)

    @precondition(lambda self: self.rig.pipe.run is None)
    @rule(depth=st.sampled_from([State.READY, State.APPROACHING, State.IN_CONTACT, State.LOADING, *BROKEN]))
    def get_to(self, depth: State) -> None:
        """A loading begun as it should be, as far as that state."""
        self.peace()
        self.open_run(tighten=False)
        self.rig.run_until(lambda: self.rig.pipe.state is State.READY or self.rig.pipe.run is None, 8.0)
        if depth is not State.READY:
            self.start()
            self.rig.run_until(lambda: self.rig.pipe.state is depth or not self.rig.pipe.armed, 8.0)

    # --- what is true always

    @invariant()
    def a_latched_state_has_no_move_in_force(self) -> None:
        if self.rig.pipe.state in LATCHED or (self.rig.pipe.state in BROKEN):
            assert not self.rig.pipe.moving

    @invariant()
    def armed_means_a_started_run(self) -> None:
        if self.rig.pipe.armed:
            assert self.rig.pipe.run is not None

    @invariant()
    def limits_do_not_widen_in_a_run(self) -> None:
        if self.rig.pipe.run is not None and self.rig.pipe.armed:
            assert self.force_n_max() <= self.ceiling_n
            self.ceiling_n = self.force_n_max()

    @invariant()
    def the_snapshot_is_plain(self) -> None:
        json.dumps(dict(self.rig.pipe.snapshot()), allow_nan=False)


TestPersonAndMachine = pytest.mark.slow(PersonAndMachine.TestCase)
TestPersonAndMachine.settings = settings(
    max_examples=40,
    stateful_step_count=40,
    deadline=None,
    suppress_health_check=list(HealthCheck),
)


@pytest.mark.slow
@pytest.mark.parametrize("first", [StopRequest(), StartRun()])
def test_stop_and_start_in_one_breath_end_in_a_stop(first: Request) -> None:
    """Reliability F12: both orders, without a sample between them."""
    rig = Rig(frame(motion__gap_mm=0.05), Machine(gap_mm=0.02)).ready()
    second: Request = StartRun() if isinstance(first, StopRequest) else StopRequest()
    for request in (first, second):
        try:
            rig.ask(request)
        except Refused:
            assert isinstance(request, StartRun)
    assert rig.pipe.state is State.STOPPED and not rig.pipe.moving
    assert isinstance(rig.actions[-1][1], Stop)
    rig.run_for(1.0)
    assert rig.machine.speed_mm_s == 0.0


def test_an_open_run_can_be_asked_for_only_once() -> None:
    rig = Rig().run_for(0.2)
    opening: OpenRun = open_run()
    rig.ask(opening)
    with pytest.raises(Refused):
        rig.ask(opening)
