"""Stages: what each state does at a beat (a few milliseconds of samples): tare, touch, seating, loading,
arrival.

Nothing here judges force limits or breaks: those come sample by sample, before any beat, in pipeline.py.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from math import isfinite

from daq.watch import aftermath
from daq.watch.core import Core, Run
from daq.watch.drops import Told, slope_between, stiffness_ratio, tell
from daq.watch.drops import window_s as drop_window_s
from daq.watch.envelope import usable
from daq.watch.expected import SECONDS_PER_MINUTE
from daq.watch.fracture import FractureWatch, Rest
from daq.watch.limits import Reaction, Trip
from daq.watch.motion import (
    CEILING_MM_MIN,
    CEILING_TIMES,
    CONTACT_SLACK_MM,
    RECKONED_TIMES,
    Flat,
    Runaway,
    back_mm_min,
)
from daq.watch.seating import Seated, Seating, seating_window_s
from daq.watch.states import ARMED, WATCHED, Cause
from daq.watch.stopping import Outcome
from daq.watch.tare import CAUTION_SHARE, Collector, TareNote, TareRules, take
from daq.watch.values import Move, MoveKind, Severity, State, Verdict

ARM_CAPACITY_SHARE, ARM_LOAD_SHARE, ARM_SIGMA = 0.02, 0.10, 20.0
PRELOAD_HIGH_SHARE = 0.10
ABSENT_S = 300.0
RATE_OFF_BY = 0.05
MANY_SLIPS = MANY_GLITCHES = 3
NO_BREAK = "no break where expected"


def beat(core: Core) -> None:
    """Everything that is judged more slowly than sample by sample."""
    _look_at_stop(core)
    run = core.run
    if run is not None and run.ended:
        aftermath.beat(core)
    stage = _STAGES.get(core.state)
    if stage is not None:
        stage(core)
    if core.state in ARMED and run is not None and not run.ended:
        _armed(core, run)
    if core.speed_watch is not None and core.travel is not None:
        trip = core.speed_watch.judge(core.clock_s, core.travel)
        if trip is not None:
            core.trip(trip)


# --- stopping


def _look_at_stop(core: Core) -> None:
    check = core.stopping
    if check is None:
        return
    rise_n = max(6.0 * core.sigma_n, 0.01 * core.setup.capacity_n)
    force_n = core.watch.level.newest_n
    look = check.look(
        core.clock_s,
        core.travel if core.travel is not None and core.travel.at_mm is not None else None,
        core.inputs.get("moving"),
        force_n if force_n is not None else 0.0,
        rise_n,
    )
    if look.repeat:
        core.repeat_stop()
    if look.outcome is Outcome.FAILED:
        _stop_failed(core, look.why)
    elif look.outcome is not None:
        core.stopping = None
        run_on = check.run_on_mm(core.travel)
        after_s = core.clock_s - check.begun_s
        core.emit("stopped", run_on_mm=run_on, after_s=after_s, verified=look.outcome is Outcome.STANDS)


def _stop_failed(core: Core, why: str) -> None:
    check = core.stopping
    assert check is not None
    after_s = core.clock_s - check.begun_s
    trip = Trip(26, after_s, check.fail_s, "s", Reaction.STOP)
    core.emit("stop_failed", Severity.EMERGENCY, why=why, after_s=after_s, attempts=check.attempt)
    core.tell_limit(trip, "the machine does not stop: " + why, Severity.EMERGENCY)
    core.repeat_stop()
    if core.run is not None and core.run.started_s is not None:
        core.end_run(Verdict.STOPPED, "stop failed")
    if core.state not in (State.UNKNOWN,):
        core.go(Cause.FAULT, "stop failed")


# --- at rest: the tare


def _at_rest(core: Core) -> None:
    """Collect a zero for the open run; judge it when it is full."""
    run = core.run
    if run is None or run.ended or run.note is not None or core.stopping is not None:
        return
    if "shield_open" in core.inputs_against():
        core.collector = None
        return
    if core.collector is None:
        core.collector = Collector(core.setup.rate_hz)
        return
    at_mm = core.travel.at_mm if core.travel is not None else None
    collector = core.collector
    if collector.at_mm is None:
        collector.at_mm = at_mm
    if not collector.full:
        return
    if core.travel is not None and at_mm is not None and collector.at_mm is not None:
        if abs(at_mm - collector.at_mm) > max(0.002, 6.0 * core.travel.resolution_mm):
            _refuse_tare(core, collector, ("the crosshead is moving",), core.gross_n)
            return
    _judge_tare(core, run, collector)


def _judge_tare(core: Core, run: Run, collector: Collector) -> None:
    plan = run.plan
    rules = TareRules(
        capacity_n=core.setup.capacity_n,
        zero_n=core.setup.frame.cell.zero_balance_n,
        quiet_n=core.setup.frame.cell.noise_quiet_n,
        step_n=core.setup.force.step,
        previous_n=core.last_tare_n,
        run_s=plan.expected.time_to_break_s,
    )
    times_s, gross_n = collector.cut()
    taken = take(times_s, gross_n, rules)
    override = plan.tare_override_reason if not taken.final else ""
    if taken.drifting and not taken.final and not override and collector.look_longer():
        return
    if taken.reasons and not override:
        _refuse_tare(core, collector, taken.reasons, taken.note.tare_n)
        return
    note = taken.note
    _accept_tare(core, run, note, rules, override if taken.reasons else "", times_s[0])
    newest = slice(-core.watch.level.bin_samples * 8, None)
    core.watch.level.begin_anew(times_s[newest].tolist(), (gross_n[newest] - note.tare_n).tolist(), 0.0)


def _refuse_tare(core: Core, collector: Collector, reasons: tuple[str, ...], gross_n: float) -> None:
    """Said once for each set of reasons; tried again for as long as the run is open."""
    words = tuple(reason.split(" ")[0] for reason in reasons)
    if collector.told != words:
        collector.told = words
        gross = gross_n if isfinite(gross_n) else None
        core.emit("tare_refused", Severity.CAUTION, reasons=reasons, gross_n=gross)
    collector.begin_again()


def _accept_tare(
    core: Core, run: Run, note: TareNote, rules: TareRules, override: str, begun_s: float
) -> None:
    run.note, core.collector = note, None
    core.tare_n, core.sigma_n, core.frozen_samples = note.tare_n, note.sigma_n, note.frozen_samples
    if core.travel is not None:
        core.travel.learn_at_rest(float(begun_s))
    core.watch = FractureWatch(core.setup.rate_hz, note.sigma_n, run.plan.method.fracture, core.setup.lag_s)
    core.watch.rest = Rest(note.low_n - note.tare_n, note.high_n - note.tare_n, note.dull, note.step_n)
    core.limits_for_run()
    core.emit(
        "tared",
        Severity.CAUTION if override else Severity.REMARK,
        tare_n=note.tare_n,
        sigma_n=note.sigma_n,
        drift_n_min=note.drift_n_min,
        u_n=note.u_n,
        samples=note.samples,
        rate_hz=note.rate_hz,
        overridden=override,
    )
    _tare_remarks(core, note, rules)
    core.go(Cause.TARED)
    _say_envelope(core, run, note)
    core.emit("ready")


def _tare_remarks(core: Core, note: TareNote, rules: TareRules) -> None:
    declared = core.setup.rate_hz
    if abs(note.rate_hz - declared) > RATE_OFF_BY * declared:
        core.emit("sample_rate_off", Severity.CAUTION, declared_hz=declared, measured_hz=note.rate_hz)
    references = [rules.zero_n] + ([rules.previous_n] if rules.previous_n is not None else [])
    shift = max((note.tare_n - reference for reference in references), key=abs)
    if abs(shift) > CAUTION_SHARE * rules.capacity_n:
        core.emit("zero_moved", Severity.CAUTION, shift_n=shift, overload_before=core.overloaded)


def arm_n(core: Core, run: Run) -> float:
    """The reference arms at max(2 % C, 20 sigma): on a big cell a weak bar would break unwatched, so also 10
    % P50.
    """
    low = min(ARM_CAPACITY_SHARE * core.setup.capacity_n, ARM_LOAD_SHARE * run.plan.expected.load_p50_n)
    return max(low, ARM_SIGMA * core.sigma_n)


def _say_envelope(core: Core, run: Run, note: TareNote) -> None:
    plan = run.plan.expected
    found = usable(
        peak_n=plan.load_p50_n,
        sigma_n=max(note.sigma_n, 1e-9),
        rate_hz=core.setup.rate_hz,
        time_to_break_s=plan.time_to_break_s,
        lag_s=core.setup.frame.cell.time_constant_s,
        arm_n=arm_n(core, run),
    )
    severity = Severity.REMARK if found.detects else Severity.CAUTION
    core.emit(
        "envelope",
        severity,
        detects=found.detects,
        reasons=found.reasons,
        budget=found.budget,
        gate=found.gate.value,
    )


# --- approach and contact


def _approaching(core: Core) -> None:
    if core.stopping is not None:
        return
    run = core.run
    base_n = 0.0 if run is not None else core.jog_base_n
    if _above(core, base_n + core.touch_n):
        core.stop("touch")
        core.go(Cause.TOUCHED)
        core.emit("approach_touch", force_n=core.gross_n, position_mm=_position(core))
        if run is not None:
            _contact(core, run)
        return
    if run is not None and _reckoned_too_far(core):
        core.trip(Trip(9, core.reckoned_mm(), _gap_mm(core), "mm", Reaction.STOP))
    elif run is None:
        _arrive(core)


def _contact(core: Core, run: Run) -> None:
    plan, motion = run.plan, core.setup.frame.motion
    assert motion is not None
    run.contact_mm = _position(core)
    derived = max(CEILING_TIMES * plan.expected.deflection_mm, CEILING_MM_MIN)
    run.travel_mm_max = plan.method.limits.travel_mm_max or derived
    core.set_bands()


def _gap_mm(core: Core) -> float:
    motion = core.setup.frame.motion
    assert motion is not None
    return motion.gap_mm + CONTACT_SLACK_MM


def _reckoned_too_far(core: Core) -> bool:
    """Without a position the set speed is all there is; with one it catches a position that stands still."""
    times = 1.0 if core.travel is None or core.travel.at_mm is None else RECKONED_TIMES
    return core.reckoned_mm() > times * _gap_mm(core)


def _in_contact(core: Core) -> None:
    """Standing on the bar: go on to seating, or, after a jog, be at rest."""
    run = core.run
    if core.stopping is not None:
        return
    if run is None or run.started_s is None:
        core.go(Cause.ARRIVED, "jog ended in contact")
        return
    net_n = core.watch.level.newest_n or 0.0
    if net_n > PRELOAD_HIGH_SHARE * run.plan.expected.load_p50_n:
        core.emit("preload_high", Severity.CAUTION, force_n=net_n + core.tare_n)
    _begin_seating(core, run)


def _begin_seating(core: Core, run: Run) -> None:
    plan = run.plan
    expected, sigma_n = plan.expected, core.sigma_n
    speed = plan.method.preload.seating_mm_min or expected.speed_mm_min
    core.go(Cause.SEATING_BEGUN)
    core.watch.watch(True, arm_n=arm_n(core, run), gradual=False)
    window_s = seating_window_s(core.setup.rate_hz, sigma_n, expected.rate_n_s, expected.time_to_break_s)
    run.seating = Seating(
        window_s=window_s,
        sigma_n=sigma_n,
        load_p50_n=expected.load_p50_n,
        speed_mm_s=expected.speed_mm_min / SECONDS_PER_MINUTE,
        contact_mm=run.contact_mm,
    )
    run.runaway = Runaway(expected.rate_n_s, expected.load_p50_n, sigma_n, core.setup.rate_hz)
    run.flat = Flat(expected.stiffness_n_mm, expected.deflection_mm, core.watch.level)
    core.move(_load_move(core, run, min(speed, expected.speed_mm_min)))


def _load_move(core: Core, run: Run, speed_mm_min: float) -> Move:
    rate = run.plan.method.rate
    looped = rate.mode != "crosshead" and rate.loop == "frame"
    return Move(MoveKind.LOAD, speed_mm_min, rate_n_s=run.plan.expected.rate_n_s if looped else None)


# --- seating, holding, loading


def _seating(core: Core) -> None:
    run = core.run
    assert run is not None
    preload = run.plan.method.preload
    if core.stopping is not None or not _above(
        core, preload.seat_percent / 100.0 * run.plan.expected.load_p50_n
    ):
        return
    if preload.hold_s > 0:
        core.stop("preload reached")
        core.go(Cause.HOLD_BEGUN)
        run.held_since_s = core.clock_s
        return
    _begin_loading(core, run)


def _holding(core: Core) -> None:
    run = core.run
    assert run is not None and run.held_since_s is not None
    if core.stopping is None and core.clock_s - run.held_since_s >= run.plan.method.preload.hold_s:
        _begin_loading(core, run)


def _begin_loading(core: Core, run: Run) -> None:
    plan = run.plan
    core.go(Cause.PRELOADED)
    core.watch.gradual = True
    speed = plan.expected.speed_mm_min
    if core.move_now is None or core.move_now.speed_mm_min != speed:
        core.move(_load_move(core, run, speed))
    core.set_bands()


def _armed(core: Core, run: Run) -> None:
    """Cautions and slow limits of a run under way."""
    clock_s, plan = core.clock_s, run.plan
    net_n = core.watch.level.newest_n
    if run.started_s is not None and clock_s - run.started_s > plan.method.limits.run_s_max:
        core.trip(Trip(33, clock_s - run.started_s, plan.method.limits.run_s_max, "s", Reaction.STOP))
        return
    if net_n is None:
        return
    _load_cautions(core, net_n + core.tare_n)
    if core.state in (State.IN_CONTACT, State.HOLDING):
        _absent(core, run)
    if core.state in WATCHED:
        _watched(core, run, net_n)


def _watched(core: Core, run: Run, net_n: float) -> None:
    at_mm = _position(core)
    if run.seating is not None and core.watch.candidate is None and core.state is not State.HOLDING:
        _tell_seating(core, run, run.seating.feed(core.clock_s, net_n, at_mm))
    if run.drop is not None and core.clock_s >= run.drop.until_s:
        tell_drop(core, run, seen=True)
    if core.move_now is None or core.watch.candidate is not None:
        return
    if run.flat is not None:
        way_mm = at_mm if at_mm is not None else core.reckoned_mm()
        trip = run.flat.judge(way_mm, core.watch.level.forecast(core.clock_s))
        if trip is not None:
            core.trip(trip)
            return
    if core.travel is not None and core.travel.at_mm is not None:
        back = core.travel.back_from_top_mm(core.move_s)
        if back > back_mm_min(core.travel, run.plan.expected.deflection_mm):
            load_taken_off(core, run, back)


def _tell_seating(core: Core, run: Run, found: Seated | str | None) -> None:
    if isinstance(found, Seated):
        gross = found.force_net_n + core.tare_n
        core.emit("seated", force_n=gross, toe_n=found.force_net_n, toe_offset_mm=found.toe_offset_mm)
        if found.force_net_n > 0.25 * run.plan.expected.load_p50_n:
            core.emit("uneven_seating", Severity.CAUTION, force_n=gross, why="long toe")
    elif found is not None:
        net = core.watch.level.newest_n or 0.0
        core.emit("uneven_seating", Severity.CAUTION, force_n=net + core.tare_n, why=found)


def load_taken_off(core: Core, run: Run, back_mm: float) -> None:
    """The crosshead goes the other way: the operator, or a drive wired wrongly. Stop, and no break of any
    kind.
    """
    what = "crosshead moves away from the specimen"
    core.watch.watch(False)
    core.stop(what)
    core.go(Cause.LOAD_TAKEN_OFF, what)
    core.tell_limit(Trip(14, -back_mm, 0.0, "mm", Reaction.STOP), what, Severity.STOP)
    core.end_run(Verdict.UNLOADED, what)


def _load_cautions(core: Core, gross_n: float) -> None:
    limits = core.limits
    if gross_n > limits.caution_n:
        _caution_once(
            core, Trip(1, gross_n, limits.caution_n, "N", Reaction.CAUTION), "load near the cell's range"
        )
    if gross_n > limits.specimen_caution_n:
        run = core.run
        assert run is not None
        if NO_BREAK not in run.told:
            core.emit("no_break", Severity.CAUTION, load_n=gross_n, expected_n=limits.specimen_caution_n)
        _caution_once(core, Trip(4, gross_n, limits.specimen_caution_n, "N", Reaction.CAUTION), NO_BREAK)


def _caution_once(core: Core, trip: Trip, what: str) -> None:
    run = core.run
    if run is None or what in run.told:
        return
    run.told.add(what)
    core.tell_limit(trip, what, Severity.CAUTION)


def _absent(core: Core, run: Run) -> None:
    since = run.held_since_s if run.held_since_s is not None else run.started_s
    if since is not None and core.clock_s - since > ABSENT_S and "absent" not in run.told:
        run.told.add("absent")
        core.emit("operator_absent", Severity.CAUTION, waited_s=core.clock_s - since)
        core.tell_limit(
            Trip(30, core.clock_s - since, ABSENT_S, "s", Reaction.CAUTION),
            "bar left standing under load",
            Severity.CAUTION,
        )


# --- partial drops


def drop_until_s(core: Core, settled_s: float, slope_n_s: float) -> float:
    return settled_s + drop_window_s(core.setup.rate_hz, core.watch.level.sigma_n, slope_n_s)


def tell_drop(core: Core, run: Run, *, seen: bool) -> Told:
    """What the waiting partial drop was. seen: the window after it is complete."""
    drop = run.drop
    assert drop is not None
    run.drop = None
    after = None
    if seen:
        after = slope_between(core.watch.level.history, drop.settled_s, drop.until_s)
    ratio = None
    if after is not None and drop.slope_before_n_s is not None:
        crosshead = run.plan.method.rate.mode == "crosshead"
        speed = core.set_speed_mm_s if crosshead and core.set_speed_mm_s > 0 else None
        ratio = stiffness_ratio(drop.slope_before_n_s, after, speed, run.plan.expected.stiffness_machine_n_mm)
    told = tell(drop, after, ratio)
    core.emit(
        told.kind,
        Severity.CAUTION if told.kind == "pop_in" else Severity.REMARK,
        load_n=drop.load_n + core.tare_n,
        drop_n=drop.drop_n,
        onset_s=drop.onset_s,
        ratio=told.ratio,
        why=told.why,
    )
    count(core, run, told.kind)
    return told


def count(core: Core, run: Run, kind: str) -> None:
    """Row 22: more slips or glitches than a good loading has."""
    run.pieces[kind] += 1
    many = {"slip": MANY_SLIPS, "glitch": MANY_GLITCHES}.get(kind)
    if many is not None and run.pieces[kind] == many + 1:
        core.emit("events_many", Severity.CAUTION, kind=kind, count=run.pieces[kind])


# --- going away, or jogging: until the distance is done


def _arrive(core: Core) -> None:
    move = core.move_now
    if move is None:
        if core.stopping is None:
            core.go(Cause.ARRIVED)
            core.emit("arrived", position_mm=_position(core))
        return
    wanted = move.distance_mm if move.distance_mm is not None else 0.0
    enough = abs(core.moved_mm()) >= wanted - (core.travel.resolution_mm if core.travel else 0.0)
    late = abs(core.reckoned_mm()) > 1.2 * wanted + abs(core.set_speed_mm_s)
    if enough or late:
        core.stop("distance done" if enough else "distance overdue")


def _unloading(core: Core) -> None:
    if core.run is not None:
        return
    if core.move_now is not None and core.watch.level.newest_n is not None:
        if abs(core.watch.level.newest_n) < core.touch_n:
            core.go(Cause.FREED)
    _arrive(core)


def _above(core: Core, net_n: float) -> bool:
    """Shown by two samples at least: a bin's mean, or two bins where a bin is one sample."""
    history = core.watch.level.history
    if core.watch.level.bin_samples > 1:
        return bool(history) and history[-1][1] > net_n
    return len(history) > 1 and history[-1][1] > net_n and history[-2][1] > net_n


def _position(core: Core) -> float | None:
    return core.travel.at_mm if core.travel is not None else None


_STAGES: Mapping[State, Callable[[Core], None]] = {
    State.AT_REST: _at_rest,
    State.APPROACHING: _approaching,
    State.IN_CONTACT: _in_contact,
    State.SEATING: _seating,
    State.HOLDING: _holding,
    State.RETURNING: _arrive,
    State.UNLOADING: _unloading,
}
