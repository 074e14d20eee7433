"""Whole loadings through the pipeline: what is commanded, what is told, and that it always comes to an end."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pytest

from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.errors import Refused
from daq.stream.payloads import pack_event, unpack_event
from daq.watch import catalogue
from daq.watch.catalogue import EVENTS
from daq.watch.faults import FAULTS
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import (
    CloseRun,
    FaultOver,
    Jog,
    Note,
    Prove,
    Reset,
    ReturnCrosshead,
    StartRun,
    StopRequest,
    TakeSeat,
    TellFault,
    TightenLimit,
)
from daq.watch.states import Cause
from daq.watch.values import Move, MoveKind, Severity, State, Stop
from tests.watch.frames import FORCE_STEP_N, POSITION_STEP_MM, frame, method, open_run
from tests.watch.rig import Machine, Rig

FAST = {"rate__speed_mm_min": 3.0}


def quick(**changes: object) -> Rig:
    """A short way and a bar that breaks after about three seconds."""
    card = frame(motion__gap_mm=0.05, **changes)  # type: ignore[arg-type]
    return Rig(card, Machine(gap_mm=0.02, strength_n=440.0))


def refusal(rig: Rig, request: object) -> tuple[str, ...]:
    with pytest.raises(Refused) as caught:
        rig.ask(request)  # type: ignore[arg-type]
    return caught.value.missing


@pytest.fixture(scope="module")
def rig() -> Rig:
    """One clean bar, looked at from many sides."""
    return quick().started(method(**FAST)).to_close().run_for(0.05)


@pytest.mark.slow
class TestOneBar:
    """A clean bar, from opening to the next one."""

    def test_the_order_of_events(self, rig: Rig) -> None:
        names = [e.name for e in rig.events if e.name not in ("state", "stop_sent")]
        wanted = [
            "run_opened",
            "tared",
            "envelope",
            "limits",
            "ready",
            "started",
            "approach_touch",
            "stopped",
        ]
        assert names[: len(wanted)] == wanted
        assert names[-5:] == ["fracture", "stopped", "residual", "after_zero", "run_closed"]

    def test_the_states_in_order(self, rig: Rig) -> None:
        words = [str(f["to"]) for f in rig.named("state")]
        assert words == [
            "ready",
            "approaching",
            "in contact",
            "seating",
            "loading",
            "broken? - still loaded",
            "broken - unloaded",
            "at rest",
        ]

    def test_the_moves_in_order(self, rig: Rig) -> None:
        assert [move.kind for move in rig.moves()] == [MoveKind.APPROACH, MoveKind.LOAD]
        assert rig.moves()[1].speed_mm_min == 3.0

    def test_the_stop_comes_within_12_ms(self, rig: Rig) -> None:
        stops = [at for at in rig.stops() if at > rig.machine.broke_s]
        assert 0 < stops[0] - rig.machine.broke_s <= 0.0151  # blocks of 5 ms

    def test_it_is_ready_for_the_next_bar_within_three_seconds(self, rig: Rig) -> None:
        assert rig.times("run_closed")[0] - rig.machine.broke_s < 3.0
        assert rig.pipe.state is State.AT_REST and rig.pipe.run is None

    def test_every_event_is_documented_and_can_be_packed(self, rig: Rig) -> None:
        for event in rig.events:
            assert event.name in EVENTS
            fields = {"event": event.name, "time_s": event.time_s, "severity": event.severity.value}
            fields |= dict(event.fields)  # type: ignore[arg-type]
            assert len(fields) == 3 + len(event.fields)
            assert unpack_event(pack_event(fields))["event"] == event.name
            json.dumps(fields, allow_nan=False)

    def test_a_record_can_be_rebuilt_from_the_stream_alone(self, rig: Rig) -> None:
        opened = rig.one("run_opened")
        assert FrameCard.model_validate_json(json.dumps(opened["frame"])) == rig.card
        assert MethodCard.model_validate_json(json.dumps(opened["method"])) == method(**FAST)
        assert opened["run"] == open_run().run
        assert (opened["series"], opened["specimen"], opened["loading"]) == ("tests", "1", 1)

    def test_the_fracture_note(self, rig: Rig) -> None:
        note = rig.one("fracture")
        assert note["verdict"] == "sudden break"
        assert abs(float(note["forecast_n"]) - rig.machine.broke_n) < 1.0  # type: ignore[arg-type]
        assert abs(float(note["onset_s"]) - rig.machine.broke_s) <= 0.001  # type: ignore[arg-type]
        assert rig.one("run_closed")["interrupted"] is False

    def test_run_on_is_what_the_machine_did(self, rig: Rig) -> None:
        run_on = float(rig.named("stopped")[-1]["run_on_mm"])  # type: ignore[arg-type]
        assert run_on == pytest.approx(3.0 / 60.0 * 0.15, abs=0.001)

    def test_no_caution_is_raised(self, rig: Rig) -> None:
        cautions = [e.name for e in rig.events if e.severity is not Severity.REMARK]
        assert cautions == []


@pytest.mark.slow
@pytest.mark.parametrize("rate_hz", [10.0, 50.0, 100.0, 1000.0])
def test_faultless_bars_raise_nothing_but_their_own_break(rate_hz: float) -> None:
    """No caution, no glitch, no drop, no outlier, whatever the strength and the toe."""
    for seed in range(4 if rate_hz > 500 else 8):
        machine = Machine(gap_mm=0.25, toe_mm=0.002 * (1 + seed), strength_n=300.0 + 30.0 * seed)
        rig = Rig(frame(rate_hz=rate_hz, motion__gap_mm=0.3), machine, seed=seed)
        rig.samples_per_block = 20 if rate_hz > 500 else 1
        rig.run_for(0.3)
        rig.ask(open_run(method(rate__speed_mm_min=1.0)))
        rig.run_until(lambda rig=rig: rig.pipe.state is State.READY, 12.0)  # type: ignore[misc]
        rig.ask(StartRun())
        rig.to_close()
        odd = ("glitch", "slip", "pop_in", "partial_drop", "limit_outlier", "rebaseline", "stop_failed")
        found = [e.name for e in rig.events if e.severity is not Severity.REMARK or e.name in odd]
        assert found == [], (seed, found)
        assert rig.one("run_closed")["verdict"] == "sudden break"
        assert len(rig.named("after_zero")) == len(rig.named("seated")) == 1


# --- stops


@pytest.mark.slow
def test_an_operators_stop_ends_the_run_and_nothing_restarts_by_itself() -> None:
    rig = quick().loading(method(**FAST), load_n=100.0)
    step = rig.ask(StopRequest(who="key"))
    assert any(isinstance(a, Stop) for a in step.actions)
    assert rig.pipe.state is State.STOPPED
    rig.to_close()
    closed = rig.one("run_closed")
    assert (closed["verdict"], closed["interrupted"]) == ("stopped", True)
    before = len(rig.moves())
    rig.run_for(1.0)
    assert "state is stopped" in refusal(rig, StartRun())
    rig.ask(Reset(who="A. Tester"))
    rig.run_for(0.5)
    assert rig.pipe.state is State.AT_REST and len(rig.moves()) == before
    assert "state is at rest" in refusal(rig, StartRun())


@pytest.mark.parametrize("state", [State.AT_REST, State.UNKNOWN])
def test_a_stop_is_obeyed_in_any_state(state: State) -> None:
    rig = Rig(clean_start=state is State.AT_REST)
    rig.run_for(0.05)
    for _ in range(3):
        step = rig.ask(StopRequest())
        assert any(isinstance(a, Stop) for a in step.actions)


@pytest.mark.slow
def test_a_bar_that_breaks_while_the_machine_stops_is_a_break() -> None:
    rig = quick()
    rig.loading(method(**FAST), load_n=420.0)
    rig.machine.latency_s, rig.machine.strength_n = 0.15, 430.0
    rig.ask(StopRequest())
    rig.to_close()
    assert rig.machine.broken
    assert rig.one("run_closed")["verdict"] == "sudden break"
    assert rig.pipe.state is State.STOPPED  # the stop stays latched


@pytest.mark.slow
def test_a_machine_that_does_not_stop_is_told_within_half_a_second() -> None:
    """Acceptance scenario 13: stop accepted, motion goes on at 8.3 um/s."""
    for speed_mm_s in (0.0083, 5.0 / 60.0):
        rig = quick().loading(method(rate__speed_mm_min=60 * speed_mm_s), load_n=80.0)
        rig.machine.deaf = True
        asked_s = rig.now_s
        rig.ask(StopRequest())
        rig.run_for(2.0)
        assert rig.times("stop_failed")[0] - asked_s <= 0.5
        assert [e.severity for e in rig.events if e.name == "stop_failed"] == [Severity.EMERGENCY]
        gaps = [b - a for a, b in zip(rig.stops(), rig.stops()[1:], strict=False) if a >= asked_s]
        assert len(gaps) >= 17 and max(gaps) <= 0.115  # repeated at 10 Hz until it stands
        assert "has not been seen to stand" in " ".join(refusal(rig, Reset(who="x", looked=True)))
        rig.machine.deaf = False
        rig.run_for(1.5)
        assert rig.named("stopped")[-1]["verified"] is True


@pytest.mark.slow
def test_without_a_position_the_stop_is_said_to_be_unverified() -> None:
    rig = quick(position=False)
    rig.loading(method(**FAST), load_n=80.0)
    rig.ask(StopRequest())
    rig.to_close()
    told = rig.named("stopped")[-1]
    assert (told["verified"], told["seen_by"], told["why"]) == (False, None, "no position is known")


@pytest.mark.slow
def test_what_the_position_cannot_show_is_said_and_not_taken_for_a_standstill() -> None:
    """0.1 mm/min against steps of 1 um: nothing shows it within 3 s of a break; on a sound bar the force does."""
    for strength_n, shown in (
        (60.0, (False, None, "slower than the position channel can show")),
        (1e9, None),
    ):
        rig = quick(channels__1__scale=1e-3)
        rig.machine.strength_n = strength_n
        rig.position_of = lambda t, at: round(at / 1e-3) * POSITION_STEP_MM
        rig.started(method(rate__speed_mm_min=0.1, limits__run_s_max=600.0))
        rig.run_until(lambda rig=rig: rig.machine.broken or (rig.pipe.snapshot()["net_n"] or 0) > 90.0, 60.0)  # type: ignore[misc]
        if shown is None:
            rig.ask(StopRequest())
            shown = (True, "force", None)
        rig.run_for(4.0)
        told = rig.named("stopped")[-1]
        assert (told["verified"], told["seen_by"], told["why"]) == shown
        assert not rig.named("stop_failed")


# --- what the bar does


@pytest.mark.slow
def test_an_operators_unloading_is_not_a_break() -> None:
    """Acceptance scenario 19: at 60 % the operator drives the crosshead back within half a second."""
    rig = quick()
    rig.loading(method(**FAST), load_n=276.0)
    rig.machine.speed_mm_s = -0.16
    rig.to_close()
    assert rig.one("run_closed")["verdict"] == "operator unload"
    assert not rig.named("fracture") and not rig.named("partial_drop")
    assert rig.pipe.state is State.STOPPED


@pytest.mark.slow
def test_a_piece_left_on_the_rollers_is_told_until_it_is_gone() -> None:
    rig = quick()
    rig.machine.residual_share = 0.3
    rig.started(method(**FAST)).to_close()
    assert [f["unloaded"] for f in rig.named("residual")] == [False]
    assert rig.pipe.state is State.BROKEN_STILL_LOADED
    assert refusal(rig, open_run(number="2"))
    rig.machine.residual_share = 0.0
    rig.run_for(0.2)
    rig.ask(Reset(who="A. Tester", looked=True))
    assert rig.pipe.state is State.AT_REST


@pytest.mark.slow
def test_a_second_break_after_a_reload_is_told_once() -> None:
    """Acceptance scenario 14: first break to 40 %, reload, second break; the strength is from the first."""
    rig = quick()
    rig.started(method(**FAST))
    rig.run_until(lambda: rig.machine.broken)
    broke = rig.now_s

    def again(now_s: float, force: float) -> float:
        after = now_s - broke
        if after < 0.3:
            return 0.4 * 440.0
        if after < 0.6:
            return (0.4 + (after - 0.3)) * 440.0
        return force

    rig.disturb = again
    rig.to_close()
    assert len(rig.named("second_break")) == 1
    assert len(rig.named("fracture")) == 1
    assert abs(float(rig.one("fracture")["forecast_n"]) - 440.0) < 2.0  # type: ignore[arg-type]


@pytest.mark.slow
def test_a_tare_taken_under_load_shows_in_the_zero_after() -> None:
    """Acceptance scenario 8: 30 N at the tare, with override: after-zero -30 N, flagged."""
    rig = quick()
    rig.disturb = lambda t, f: f if rig.machine.broken else f + 30.0
    rig.ready(method(**FAST), override="told to")
    rig.ask(StartRun())
    rig.to_close()
    assert rig.one("tared")["overridden"] == "told to"
    after = rig.one("after_zero")
    assert after["flagged"] is True
    assert float(after["shift_n"]) == pytest.approx(-30.0, abs=0.5)  # type: ignore[arg-type]


@pytest.mark.slow
def test_something_left_on_a_cell_under_the_supports_is_told_and_the_unseen_is_not_claimed() -> None:
    """Acceptance scenario 4: half a mortar prism, 2.6 N; with sigma 3 N it cannot be seen, and that is said."""
    for sigma, told in ((0.4, True), (3.0, False)):
        rig = quick(rate_hz=80.0, cell__position="supports", cell__noise_quiet_n=sigma)
        rig.noise_n = sigma
        rig.disturb = lambda t, f, rig=rig: f + 2.6 if rig.machine.broken else f  # type: ignore[misc]
        rig.started(method(**FAST)).to_close()
        assert bool(rig.named("rests_on_fixture")) is told
        seen_from = float(rig.one("after_zero")["rests_seen_from_n"])  # type: ignore[arg-type]
        assert (seen_from < 2.6) is told


@pytest.mark.slow
def test_the_back_off_comes_only_where_the_card_wants_it() -> None:
    rig = quick(motion__backoff_auto=True, motion__backoff_mm=0.5)
    rig.started(method(**FAST)).to_close()
    assert rig.moves()[-1].kind is MoveKind.RETURN
    assert "returning" in [f["to"] for f in rig.named("state")]
    assert rig.pipe.state is State.AT_REST
    assert rig.machine.at_mm < 0.05
    assert len(rig.named("after_zero")) == 1


# --- the signal


LOSSES = {
    "frozen": lambda last: lambda t, c: last,
    "zero": lambda last: lambda t, c: 0.0,
    "nan": lambda last: lambda t, c: math.nan,
}


@pytest.mark.slow
@pytest.mark.parametrize("how", [*LOSSES, "silent"])
def test_a_lost_signal_is_never_a_break(how: str) -> None:
    """Acceptance scenario 9: at 276 N the signal goes; stop within 100 ms, nothing driven back."""
    rig = quick().loading(load_n=276.0)
    lost_s = rig.now_s
    if how == "silent":
        rig.silent = True
    else:
        last = round(float(rig.pipe.snapshot()["gross_n"]) / FORCE_STEP_N)  # type: ignore[arg-type]
        rig.count_of = LOSSES[how](float(last))
    moves = len(rig.moves())
    rig.to_close(6.0)
    assert min(at for at in rig.stops() if at >= lost_s) - lost_s <= 0.1
    assert rig.one("run_closed")["verdict"] == "signal lost - specimen may be loaded"
    assert rig.one("run_closed")["interrupted"] is True
    assert not rig.named("fracture") and len(rig.moves()) == moves
    assert rig.pipe.state is State.SIGNAL_LOST
    force = rig.machine.step(rig.now_s, 0.0)
    assert force <= 276.0 + 28.3 * 0.3


@pytest.mark.slow
def test_a_change_of_unit_is_a_lost_signal() -> None:
    """N to kN in the middle of a run: a thousandth of the force with a thousandth of the noise is no break."""
    rig = quick().loading(load_n=200.0)
    rig.count_of = lambda t, c: c / 1000.0
    rig.run_for(1.0)
    assert rig.pipe.state is State.SIGNAL_LOST and not rig.named("fracture")


@pytest.mark.slow
def test_a_change_of_sign_is_a_lost_signal() -> None:
    rig = quick().loading(load_n=200.0)
    rig.count_of = lambda t, c: -c
    rig.run_for(1.0)
    assert rig.pipe.state is State.SIGNAL_LOST and not rig.named("fracture")


def test_a_loss_at_rest_heals_by_itself_and_latches_nothing() -> None:
    rig = Rig().run_for(0.2)
    rig.silent = True
    rig.run_for(0.1)
    assert rig.pipe.state is State.SIGNAL_LOST and not rig.stops()
    rig.silent = False
    rig.run_for(0.4)
    assert rig.pipe.state is State.SIGNAL_LOST
    rig.run_for(0.3)
    assert rig.pipe.state is State.AT_REST


@pytest.mark.parametrize(("missing", "ends"), [(5, False), (6, True)])
def test_a_gap_is_listed_and_a_long_one_ends_the_run(missing: int, ends: bool) -> None:
    rig = quick().loading(method(**FAST), load_n=100.0)
    rig.index += missing
    rig.now_s = rig.index / rig.rate_hz
    pipe_advance = rig.pipe.advance

    def with_gap(block, now_s):  # type: ignore[no-untyped-def]
        rig.pipe.advance = pipe_advance  # type: ignore[method-assign]
        gap = type(block)(block.source, block.first_index, block.time_s, block.counts, missing)
        return pipe_advance(gap, now_s)

    rig.pipe.advance = with_gap  # type: ignore[method-assign]
    rig.run_for(0.02)
    assert rig.one("gap")["missing"] == missing
    assert (rig.pipe.state is State.SIGNAL_LOST) is ends


@pytest.mark.slow
def test_going_on_by_force_alone_needs_the_methods_leave() -> None:
    rig = quick().loading(method(limits__force_only_allowed=True, **FAST), load_n=100.0)
    rig.position_of = lambda t, x: math.nan
    rig.to_close()
    assert rig.one("run_closed")["verdict"] == "sudden break"
    assert rig.named("displacement_lost")


@pytest.mark.slow
def test_a_position_that_stands_still_while_the_force_rises_is_lost() -> None:
    rig = quick().loading(load_n=100.0)
    at = rig.machine.at_mm
    rig.position_of = lambda t, x: at
    rig.run_for(3.0)
    assert 16 in rig.rows()


@pytest.mark.slow
def test_noise_that_comes_up_during_a_run_is_told_and_stops_nothing() -> None:
    rig = quick().loading(load_n=150.0)
    rig.noise_n = 1.0
    rig.run_for(4.0)
    assert rig.rows() == [17] and len(rig.named("noise_high")) == 1
    assert rig.pipe.state is State.LOADING


@pytest.mark.slow
def test_a_jog_with_a_dead_cell_is_stopped() -> None:
    rig = Rig(machine=Machine(gap_mm=20.0)).run_for(0.3)
    rig.count_of = lambda t, c: 0.0
    rig.ask(Jog(1.0, 5.0))
    rig.run_for(0.7)
    assert rig.pipe.state is State.SIGNAL_LOST and rig.machine.at_mm < 0.06


# --- wires


@pytest.mark.slow
def test_reversed_wires_are_stopped_and_lock_the_frame() -> None:
    """Acceptance scenario 10: approach at 5 mm/min onto a bar with the sign reversed: |F| <= 65 N."""
    rig = Rig(frame(), Machine(gap_mm=0.05, reversed_force=True, strength_n=1e9))
    rig.started()
    rig.run_until(lambda: rig.pipe.run is None, 10.0)
    assert rig.rows() == [5]
    assert abs(rig.machine.step(rig.now_s, 0.0)) <= 65.0
    rig.machine.reversed_force, rig.machine.gap_mm = False, 5.0
    rig.run_for(0.2)
    rig.ask(Reset(who="x"))
    rig.run_for(0.2)
    assert any("polarity" in why for why in refusal(rig, open_run(loading=2)))
    rig.ask(Prove(who="x", polarity=True, stop_drill=True))
    rig.ask(open_run(loading=2))


@pytest.mark.slow
def test_a_blocked_fixture_is_met_with_less_than_half_the_cell() -> None:
    """Acceptance scenario 10: empty blocked fixture, 20 kN/mm, jog 50 mm/min asked."""
    card = frame(motion__blocked_stiffness_n_mm=20_000.0)
    rig = Rig(card, Machine(gap_mm=0.3, stiffness_n_mm=20_000.0, toe_mm=1e-6, strength_n=1e9)).run_for(0.3)
    rig.samples_per_block = 1
    rig.ask(Jog(2.0, 50.0))
    most = 0.0
    while rig.pipe.state is State.APPROACHING or rig.machine.speed_mm_s:
        rig.run_for(0.01)
        most = max(most, rig.machine.step(rig.now_s, 0.0))
    assert rig.moves()[0].speed_mm_min <= 9.95
    assert 0 < most <= 500.0


@pytest.mark.slow
def test_a_wrong_speed_unit_is_stopped_before_15_percent() -> None:
    """Acceptance scenario 10: mm/s taken for mm/min; the stop is commanded before 15 % of the median load."""
    rig = quick()
    rig.samples_per_block = 1
    rig.machine.strength_n = 1e9
    rig.machine.latency_s = 0.02
    rig.started().run_until(lambda: rig.pipe.state is State.SEATING)
    rig.machine.speed_mm_s *= 60.0
    rig.run_until(lambda: 8 in rig.rows(), 2.0)
    assert float(rig.pipe.snapshot()["net_n"]) <= 0.15 * 466.0  # type: ignore[arg-type]


# --- inputs, faults, start


@pytest.mark.slow
@pytest.mark.parametrize(
    ("name", "state"),
    [
        ("shield_open", State.SHIELD_OPEN),
        ("emergency_stop", State.EMERGENCY_STOP),
        ("drive_fault", State.STOPPED),
        ("end_down", State.STOPPED),
    ],
)
@pytest.mark.parametrize("value", [True, None])
def test_a_status_input_stops_a_run_and_so_does_not_knowing_it(
    name: str, state: State, value: bool | None
) -> None:
    rig = quick(inputs=(name,))
    rig.inputs(**{name: False})
    rig.loading(method(**FAST), load_n=60.0)
    step = rig.inputs(**{name: value})
    assert isinstance(step.actions[0], Stop)
    assert rig.pipe.state is (state if value else State.STOPPED)
    assert 25 in rig.rows()
    rig.to_close()
    if value and name != "end_down":
        assert any("active" in why for why in refusal(rig, Reset(who="x")))
    rig.inputs(**{name: False})
    before = len(rig.moves())
    rig.ask(Reset(who="x"))  # released and reset: still nothing moves
    rig.run_for(0.5)
    assert len(rig.moves()) == before and rig.pipe.state is State.AT_REST


def test_an_open_shield_at_rest_trips_nothing_and_blocks_the_start() -> None:
    rig = quick(inputs=("shield_open",))
    rig.inputs(shield_open=False)
    rig.ready(method(**FAST))
    assert not rig.inputs(shield_open=True).actions
    assert rig.pipe.state is State.AT_REST and rig.pipe.run is not None
    assert "shield open: active" in refusal(rig, StartRun())
    rig.run_for(0.5)
    rig.inputs(shield_open=False)
    rig.run_until(lambda: rig.pipe.state is State.READY, 6.0)
    assert len(rig.named("tared")) == 2  # the bar may have been touched


def test_an_input_that_was_never_told_blocks() -> None:
    rig = quick(inputs=("emergency_stop",)).run_for(0.2)
    assert "emergency stop: not known" in refusal(rig, open_run())


@pytest.mark.parametrize("name", [*FAULTS, "never heard of"])
def test_faults_stop_what_moves_and_only_tell_at_rest(name: str) -> None:
    rig = quick().run_for(0.3)
    rig.fault(name, "detail")
    assert not rig.stops()
    told = rig.one("fault")
    assert told["name"] == name and told["do_now"] and told["what"]
    reaction = FAULTS.get(name)
    if reaction is not None and reaction.blocks_start:
        assert any(reaction.what in why for why in refusal(rig, open_run()))


def test_what_only_the_station_sees_blocks_the_start_until_it_is_over() -> None:
    rig = quick().run_for(0.3)
    rig.ask(TellFault("disk_low", "3 % free"))
    assert rig.one("fault")["name"] == "disk_low" and not rig.stops()
    assert "too little room on the disk for a series (3 % free)" in refusal(rig, open_run())
    rig.ask(FaultOver("disk_low"))
    rig.ready()
    assert rig.pipe.state is State.READY


def test_a_seat_that_changes_hands_is_an_event_in_every_state() -> None:
    rig = Rig(clean_start=False).run_for(0.1)
    rig.ask(TakeSeat("Olaf", "Ines"))
    assert rig.one("seat_taken") == {"operator": "Olaf", "before": "Ines"}


@pytest.mark.slow
@pytest.mark.parametrize(
    "name", ["link_lost", "station_silent", "recorder_lag", "ring_full", "never heard of"]
)
def test_faults_stop_a_loading(name: str) -> None:
    rig = quick().loading(method(**FAST), load_n=60.0)
    step = rig.fault(name)
    assert isinstance(step.actions[0], Stop)
    lost = name == "link_lost"
    assert rig.pipe.state is (State.SIGNAL_LOST if lost else State.STOPPED)
    rig.to_close()
    assert rig.one("run_closed")["verdict"] == ("signal lost - specimen may be loaded" if lost else "stopped")
    assert rig.one("fault")["first"] is True


@pytest.mark.slow
def test_the_first_cause_is_marked_among_its_followers() -> None:
    rig = quick().loading(method(**FAST), load_n=60.0)
    rig.fault("ring_full")
    rig.fault("station_silent")
    firsts = [e.fields["first"] for e in rig.events if e.name == "fault"]
    assert firsts == [True, False]


def test_after_an_unclean_end_nothing_moves_until_a_person_has_looked() -> None:
    rig = Rig(clean_start=False)
    assert rig.pipe.state is State.UNKNOWN
    assert "no force signal" in refusal(rig, Reset(who="x", looked=True))
    rig.run_for(0.2)
    assert "look at the frame first" in refusal(rig, Reset(who="x"))
    for request in (open_run(), StartRun(), Jog(0.1, 1.0), ReturnCrosshead(0.1, 1.0)):
        assert refusal(rig, request)
    rig.ask(Reset(who="x", looked=True))
    assert rig.pipe.state is State.AT_REST and not rig.actions


def test_a_real_frame_moves_only_when_it_is_proven() -> None:
    card = frame(simulated=False)
    rig = Rig(card, proven=Proven(polarity=False, stop_drill=True)).run_for(0.2)
    assert any("polarity" in why for why in refusal(rig, Jog(0.1, 1.0)))
    rig = Rig(card, proven=Proven(polarity=True, stop_drill=False)).ready()
    assert any("stop drill" in why for why in refusal(rig, StartRun()))
    rig.ask(Prove(who="x", polarity=True, stop_drill=True))
    rig.ask(StartRun())
    assert rig.pipe.state is State.APPROACHING


def test_a_start_lists_everything_that_is_missing() -> None:
    rig = quick(inputs=("shield_open", "emergency_stop"))
    assert set(refusal(rig, StartRun())) >= {
        "state is at rest",
        "no force signal",
        "no position signal",
        "shield open: not known",
        "emergency stop: not known",
    }


# --- the rest of the desk


def test_a_run_that_was_not_started_can_be_closed() -> None:
    rig = quick().ready()
    rig.ask(CloseRun(reason="wrong bar"))
    closed = rig.one("run_closed")
    assert (closed["verdict"], closed["interrupted"], closed["reason"]) == ("stopped", True, "wrong bar")
    assert rig.pipe.state is State.AT_REST and rig.pipe.run is None
    rig.ask(open_run(loading=2))


@pytest.mark.slow
def test_a_loading_can_be_closed_and_is_stopped_first() -> None:
    rig = quick().loading(method(**FAST), load_n=60.0)
    step = rig.ask(CloseRun(reason="enough"))
    assert isinstance(step.actions[0], Stop)
    rig.to_close()
    assert rig.one("run_closed")["reason"] == "enough"


@pytest.mark.slow
def test_a_return_with_load_on_the_bar_unloads_and_then_returns() -> None:
    rig = quick().loading(method(**FAST), load_n=200.0)
    rig.ask(StopRequest())
    rig.to_close()
    rig.ask(Reset(who="x"))
    rig.ask(ReturnCrosshead(1.0, 20.0))
    assert rig.pipe.state is State.UNLOADING
    rig.run_until(lambda: rig.pipe.state is State.AT_REST, 8.0)
    words = [f["to"] for f in rig.named("state")][-3:]
    assert words == ["unloading", "returning", "at rest"]
    assert not rig.named("fracture")
    assert rig.machine.at_mm < 0.0


@pytest.mark.slow
def test_a_jog_stops_at_its_distance() -> None:
    rig = Rig(machine=Machine(gap_mm=20.0)).run_for(0.3)
    rig.ask(Jog(0.5, 5.0))
    rig.run_until(lambda: rig.pipe.state is State.AT_REST, 10.0)
    assert rig.machine.at_mm == pytest.approx(0.5, abs=0.02)
    assert rig.named("arrived")


@pytest.mark.slow
def test_limits_can_only_be_tightened_and_stay_so() -> None:
    rig = quick()
    rig.run_for(0.3)
    assert refusal(rig, TightenLimit("force_n_max", 300.0))  # no run is open
    rig.ask(open_run(method(**FAST)))
    rig.ask(TightenLimit("force_n_max", 300.0))
    rig.run_until(lambda: rig.pipe.state is State.READY, 6.0)
    assert rig.pipe.snapshot()["force_n_max"] == 300.0  # deriving them anew at the tare widens nothing
    for value in (301.0, 0.0, -1.0, math.nan):
        assert refusal(rig, TightenLimit("force_n_max", value))
    assert refusal(rig, TightenLimit("run_s_max", 1.0))
    rig.ask(StartRun())
    rig.to_close()
    assert 0 in rig.rows() and not rig.machine.broken


@pytest.mark.parametrize(
    ("changes", "word"),
    [
        ({"support_span_mm": 80.0}, "support span"),
        ({"expected__strength_mpa": 900.0}, "expected break load"),
        ({"limits__force_n_max": 950.0}, "force_n_max"),
        ({"rate__speed_mm_min": 500.0}, "speed"),
        ({"rate__mode": "force"}, "rate"),
    ],
)
def test_a_run_that_could_not_be_kept_safe_is_not_opened(changes: dict[str, object], word: str) -> None:
    rig = quick().run_for(0.2)
    missing = refusal(rig, open_run(method(**changes)))
    assert any(word in why for why in missing), missing
    assert rig.pipe.run is None


def test_a_frame_without_motion_is_never_moved() -> None:
    rig = Rig(frame(motion=False)).run_for(0.2)
    assert any("no motion" in why for why in refusal(rig, Jog(1.0, 1.0)))
    assert refusal(rig, ReturnCrosshead(1.0, 1.0))
    assert not rig.moves()


def test_notes_and_snapshots() -> None:
    rig = quick().run_for(0.2)
    rig.ask(Note("heard a click"))
    assert rig.one("note")["text"] == "heard a click"
    json.dumps(dict(rig.pipe.snapshot()), allow_nan=False)
    fresh = Pipeline(frame(), clean_start=True, proven=Proven(True, True))
    json.dumps(dict(fresh.snapshot()), allow_nan=False)


def test_a_tick_without_data_decides_nothing_before_anything_was_heard() -> None:
    pipe = Pipeline(frame(), clean_start=True, proven=Proven(True, True))
    for n in range(100):
        assert not pipe.advance(None, n * 0.01).events
    assert pipe.state is State.AT_REST


def test_causes_are_all_used() -> None:
    """A cause nobody gives is a hole in the table's story."""
    folder = Path(catalogue.__file__).parent
    text = "".join(p.read_text("utf-8") for p in folder.glob("*.py") if p.name != "states.py")
    unused = [cause.name for cause in Cause if f"Cause.{cause.name}" not in text]
    assert unused == []


def test_the_catalogue_holds_nothing_that_is_never_told() -> None:
    folder = Path(catalogue.__file__).parent
    text = "".join(p.read_text("utf-8") for p in folder.glob("*.py") if p.name != "catalogue.py")
    assert [name for name in EVENTS if f'"{name}"' not in text] == []


def test_moves_are_frozen_values() -> None:
    with pytest.raises(AttributeError):
        Move(MoveKind.JOG, 1.0).speed_mm_min = 2.0  # type: ignore[misc]
