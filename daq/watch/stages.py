"""Stages: what each state does at a beat (a few milliseconds of samples): touch, seating, loading, arrival.

Nothing here judges force limits or breaks: those come sample by sample, before any beat, in pipeline.py.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from math import sqrt

from daq.watch import aftermath, signal, zero
from daq.watch.core import Core, Run
from daq.watch.expected import SECONDS_PER_MINUTE
from daq.watch.findings import load_taken_off, tell_drop
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
from daq.watch.pace import Pace
from daq.watch.seating import TOE_SHARE, Seated, Seating, seating_window_s, slope_u_n_s
from daq.watch.states import ARMED, BROKEN, Cause
from daq.watch.stopping import Force, Outcome
from daq.watch.values import Move, MoveKind, Severity, State, Verdict

PRELOAD_HIGH_SHARE = 0.10
ABSENT_S = 300.0
NOISE_TIMES, NOISY_S = 3.0, 2.0
LATE_SHARE = 0.95
LOOK_FROM, LOOK_TO, LOOK_OFF_BY = 0.25, 0.5, 0.15
STOP_FAILED_ROW = 26
TOUCHING_SHARE, TOUCHING_STIFFNESS = 0.1, 0.5  # beyond the toe; half of what was planned


def beat(core: Core) -> None:
    """Everything that is judged more slowly than sample by sample."""
    if core.stopping is not None:
        _look_at_stop(core)
    run = core.run
    if run is not None and run.ended:
        aftermath.beat(core)
    stage = _STAGES.get(core.state)
    if stage is not None:
        stage(core)
    if run is not None and not run.ended and run.started_s is not None and core.state in ARMED:
        _armed(core, run)
    if core.speed_watch is not None and core.travel is not None:
        _speed(core)


# --- stopping


def _look_at_stop(core: Core) -> None:
    check = core.stopping
    assert check is not None
    travel = core.travel if core.travel is not None and core.travel.at_mm is not None else None
    look = check.look(core.clock_s, travel, core.inputs.get("moving"), _force_witness(core))
    if look.repeat:
        core.repeat_stop()
    if look.outcome is Outcome.FAILED:
        stop_failed(core, look.why, look.row)
    elif look.outcome is not None:
        core.stopping = None
        stands = look.outcome is Outcome.STANDS
        core.emit(
            "stopped",
            run_on_mm=check.run_on_mm(travel),
            after_s=core.clock_s - check.begun_s,
            verified=stands,
            seen_by=look.why if stands else None,
            why=None if stands else look.why,
        )


def _force_witness(core: Core) -> Force:
    """The force as a second witness of a standstill: beyond the toe, on a bar that is not broken."""
    level, run = core.watch.level, core.run
    force_n = level.newest_n or 0.0
    stiffness_n_mm = 0.0
    if run is not None and run.contact_s is not None and core.state not in BROKEN and run.finding is None:
        expected = run.plan.expected
        if force_n > TOUCHING_SHARE * expected.load_p50_n:
            stiffness_n_mm = TOUCHING_STIFFNESS * expected.stiffness_n_mm
    return Force(
        force_n=force_n,
        rise_n=max(6.0 * core.sigma_n, 0.01 * core.setup.capacity_n),
        sigma_n=level.sigma_n / sqrt(level.bin_samples),
        stiffness_n_mm=stiffness_n_mm,
    )


def stop_failed(core: Core, why: str, row: int = STOP_FAILED_ROW) -> None:
    """The emergency wording; the stop goes on being repeated until the crosshead stands."""
    check = core.stopping
    if check is None:
        core.stop(why)
        check = core.stopping
        assert check is not None
    after_s = core.clock_s - check.begun_s
    core.emit("stop_failed", Severity.EMERGENCY, why=why, after_s=after_s, attempts=check.attempt)
    trip = Trip(row, after_s, check.fail_s, "s", Reaction.STOP)
    core.tell_limit(trip, "the machine does not stop: " + why, Severity.EMERGENCY)
    core.repeat_stop()
    core.end_run(Verdict.STOPPED, "stop failed")
    if core.state is not State.UNKNOWN:
        core.go(Cause.FAULT, "stop failed")


# --- approach and contact


def _approaching(core: Core) -> None:
    if core.stopping is not None:
        return
    run = core.run
    base_n = 0.0 if run is not None else core.jog_base_n
    if _above(core, base_n + core.touch_n):
        core.stop("touch")
        core.go(Cause.TOUCHED)
        core.emit("approach_touch", force_n=core.gross_n, position_mm=core.raw_position_mm)
        if run is not None:
            _contact(core, run)
    elif run is None:
        _arrive(core)
    elif _reckoned_too_far(core):
        core.trip(Trip(9, core.reckoned_mm(), _gap_mm(core), "mm", Reaction.STOP))


def _contact(core: Core, run: Run) -> None:
    expected = run.plan.expected
    run.contact_mm, run.contact_s, run.contact_way_mm = _at_mm(core), core.clock_s, core.way_mm
    derived = max(CEILING_TIMES * expected.deflection_mm, CEILING_MM_MIN)
    ceiling = run.plan.method.limits.travel_mm_max or derived
    run.travel_mm_max = min(ceiling, run.tight.get("travel_mm_max", ceiling))
    core.set_bands()


def _gap_mm(core: Core) -> float:
    motion = core.setup.frame.motion
    assert motion is not None
    return motion.gap_mm + CONTACT_SLACK_MM


def _reckoned_too_far(core: Core) -> bool:
    """Without a position the set speed is all there is; with one it catches a position that stands still."""
    times = 1.0 if _at_mm(core) is None else RECKONED_TIMES
    return core.reckoned_mm() > times * _gap_mm(core)


def _ready(core: Core) -> None:
    """Monitor only: the machine's own controls move the crosshead, so the touch is the start."""
    run = core.run
    if run is None or not core.monitor_only or not _above(core, core.touch_n):
        return
    run.started_s, run.start_mm = core.clock_s, _at_mm(core)
    core.go(Cause.STARTED, "touched; started at the machine")
    core.emit("started", speed_mm_min=None)
    core.go(Cause.TOUCHED)
    core.emit("approach_touch", force_n=core.gross_n, position_mm=core.raw_position_mm)
    _contact(core, run)


def _in_contact(core: Core) -> None:
    """Standing on the bar: go on to seating, or, after a jog, be at rest."""
    run = core.run
    if core.stopping is not None:
        return
    if run is None or run.started_s is None:
        core.go(Cause.ARRIVED, "jog ended in contact")
        return
    net_n, p50_n = core.watch.level.newest_n or 0.0, run.plan.expected.load_p50_n
    if net_n > PRELOAD_HIGH_SHARE * p50_n:
        severity = Severity.CAUTION if net_n > TOE_SHARE * p50_n else Severity.REMARK
        core.emit("preload_high", severity, force_n=net_n + core.tare_n)
    _begin_seating(core, run)


def _begin_seating(core: Core, run: Run) -> None:
    expected, sigma_n, rate_hz = run.plan.expected, core.sigma_n, core.setup.rate_hz
    core.go(Cause.SEATING_BEGUN)
    core.watch.level.stand()
    core.watch.watch(True, arm_n=zero.arm_n(core, run), gradual=False)
    window_s = seating_window_s(rate_hz, sigma_n, expected.rate_n_s, expected.time_to_break_s)
    run.seating = Seating(
        window_s=window_s,
        slope_u_n_s=slope_u_n_s(rate_hz, sigma_n, window_s),
        sigma_n=sigma_n,
        load_p50_n=expected.load_p50_n,
        speed_mm_s=expected.speed_mm_min / SECONDS_PER_MINUTE,
        contact_mm=run.contact_mm,
    )
    if core.travel is not None:
        run.back_mm_max = back_mm_min(core.travel, expected.deflection_mm)
    run.flat = Flat(expected.stiffness_n_mm, expected.deflection_mm, core.watch.level)
    speed = run.plan.method.preload.seating_mm_min or expected.speed_mm_min
    _load(core, run, min(speed, expected.speed_mm_min))


def _load(core: Core, run: Run, speed_mm_min: float) -> None:
    rate, expected = run.plan.method.rate, run.plan.expected
    looped = rate.mode != "crosshead" and rate.loop == "frame"
    core.move(Move(MoveKind.LOAD, speed_mm_min, rate_n_s=expected.rate_n_s if looped else None))
    if core.monitor_only:
        return
    core.runaway = Runaway(expected.rate_n_s, expected.load_p50_n, core.sigma_n, core.setup.rate_hz)


# --- seating, holding, loading


def _seating(core: Core) -> None:
    run = core.run
    assert run is not None
    preload = run.plan.method.preload
    preload_n = preload.seat_percent / 100.0 * run.plan.expected.load_p50_n
    if core.stopping is not None or not _above(core, preload_n):
        return
    if preload.hold_s > 0:
        core.stop("preload reached")
        core.go(Cause.HOLD_BEGUN)
        run.held_since_s = core.clock_s
    else:
        _begin_loading(core, run)


def _holding(core: Core) -> None:
    run = core.run
    assert run is not None and run.held_since_s is not None
    if core.stopping is None and core.clock_s - run.held_since_s >= run.plan.method.preload.hold_s:
        run.held_since_s = None
        _begin_loading(core, run)


def _begin_loading(core: Core, run: Run) -> None:
    method, expected = run.plan.method, run.plan.expected
    core.go(Cause.PRELOADED)
    core.watch.gradual = True
    run.smooth_since_s = core.clock_s
    wanted = None if method.rate.mode == "crosshead" else expected.rate_n_s
    tolerance = method.rate.tolerance_percent / 100.0
    run.pace = Pace(wanted, tolerance, core.sigma_n, core.setup.rate_hz)
    if core.move_now is None or core.move_now.speed_mm_min != expected.speed_mm_min:
        _load(core, run, expected.speed_mm_min)
    core.set_bands()


def _armed(core: Core, run: Run) -> None:
    """Cautions and slow limits of a run under way."""
    assert run.started_s is not None
    lasted_s, run_s_max = core.clock_s - run.started_s, run.plan.method.limits.run_s_max
    if lasted_s > run_s_max:
        core.trip(Trip(33, lasted_s, run_s_max, "s", Reaction.STOP))
        return
    net_n = core.watch.level.newest_n
    if net_n is None:
        return
    gross_n, limits = net_n + core.tare_n, core.limits
    if gross_n > limits.caution_n:
        _once(
            core, run, Trip(1, gross_n, limits.caution_n, "N", Reaction.CAUTION), "load near the cell's range"
        )
    if gross_n > limits.specimen_caution_n:
        trip = Trip(4, gross_n, limits.specimen_caution_n, "N", Reaction.CAUTION)
        if _once(core, run, trip, "no break where expected"):
            core.emit("no_break", Severity.CAUTION, load_n=gross_n, expected_n=limits.specimen_caution_n)
    if core.state in (State.IN_CONTACT, State.HOLDING):
        _absent(core, run)
    if run.seating is not None and run.seating.seated is not None:
        _noise(core, run)
    if core.watched:
        _watched(core, run, net_n)


def _watched(core: Core, run: Run, net_n: float) -> None:
    if run.drop is not None and core.clock_s >= run.drop.until_s:
        tell_drop(core, run, seen=True)
    if core.move_now is None or core.watch.candidate is not None:
        return
    if core.runaway is not None:
        core.runaway.use_noise(core.watch.level.sigma_n)
        trip = core.runaway.judge_slope(core.watch.level, net_n)
        if trip is not None:
            core.trip(trip)
            return
    at_mm = _at_mm(core)
    if run.seating is not None:
        _tell_seating(core, run, run.seating.feed(core.clock_s, net_n, at_mm))
    if run.pace is not None:
        _tell_pace(core, run, run.pace, net_n)
    trip = _way_trip(core, run, at_mm)
    if trip is not None:
        core.trip(trip)
        return
    seated = run.seating is not None and run.seating.seated is not None
    if run.hum is not None and run.pace is not None and seated:
        level = core.watch.level
        line = run.hum.beat(core.clock_s, run.smooth_since_s, level.sigma_n, reversed(level.history))
        if line is not None:
            zero.tell_hum(core, run, line)
    if core.travel is not None and at_mm is not None and core.travel.back_mm > run.back_mm_max:
        load_taken_off(core, run)


def _way_trip(core: Core, run: Run, at_mm: float | None) -> Trip | None:
    """Rows 10 and 11 by the way since contact, reckoned from the set speeds where there is no position."""
    assert core.move_now is not None
    way_mm = core.way_mm - run.contact_way_mm
    if at_mm is None:
        times = RECKONED_TIMES if core.move_now.rate_n_s is not None else 1.0
        if way_mm > times * run.travel_mm_max:
            return Trip(11, way_mm, times * run.travel_mm_max, "mm", Reaction.STOP)
    if run.flat is None:
        return None
    measured_mm = way_mm if at_mm is None else at_mm
    return run.flat.judge(measured_mm, way_mm, core.watch.level.forecast(core.clock_s))


def _tell_seating(core: Core, run: Run, found: Seated | str | None) -> None:
    if found is None:
        return
    p50_n = run.plan.expected.load_p50_n
    if isinstance(found, Seated):
        gross = found.force_net_n + core.tare_n
        core.emit(
            "seated", force_n=gross, toe_n=found.toe_net_n + core.tare_n, toe_offset_mm=found.toe_offset_mm
        )
        if found.toe_net_n > TOE_SHARE * p50_n and not found.late_known:
            core.emit("uneven_seating", Severity.CAUTION, force_n=gross, why="long toe")
    else:
        net = core.watch.level.newest_n or 0.0
        core.emit("uneven_seating", Severity.CAUTION, force_n=net + core.tare_n, why=found)


def _tell_pace(core: Core, run: Run, pace: Pace, net_n: float) -> None:
    expected = run.plan.expected
    if net_n > LATE_SHARE * expected.load_p999_n:
        return
    told = pace.judge(core.clock_s, run.smooth_since_s, core.watch.level.history)
    if told is not None:
        core.emit(told.event, rate_n_s=told.rate_n_s, wanted_n_s=told.wanted_n_s, duration_s=told.lasted_s)
    _second_look(core, run, pace, net_n)
    if run.plan.method.rate.mode != "crosshead" and run.plan.method.rate.loop == "midspan":
        _correct_speed(core, run, pace)


def _second_look(core: Core, run: Run, pace: Pace, net_n: float) -> None:
    """Row 24, against the plan: only where the machine's own compliance is known, else it would cry wolf."""
    expected = run.plan.expected
    share = net_n / expected.load_p50_n
    due = LOOK_FROM <= share <= LOOK_TO and pace.rate_n_s is not None and "look" not in run.told
    if not due or not run.plan.compliance_known or run.plan.method.rate.mode != "crosshead":
        return
    assert pace.rate_n_s is not None
    machine = expected.stiffness_machine_n_mm
    slope = pace.rate_n_s / (expected.speed_mm_min / SECONDS_PER_MINUTE)
    if machine is None or not 0 < slope < machine:
        return
    ratio = 1.0 / (1.0 / slope - 1.0 / machine) / expected.stiffness_bar_n_mm
    if share > 0.5 * (LOOK_FROM + LOOK_TO) and abs(ratio - 1.0) > LOOK_OFF_BY:
        run.told.add("look")
        core.emit("second_look", Severity.CAUTION, ratio=ratio)


def _correct_speed(core: Core, run: Run, pace: Pace) -> None:
    """The force loop closed by midspan: small, bounded, and slow against the slope it looks at."""
    motion, move = core.setup.frame.motion, core.move_now
    factor = pace.speed_factor(core.clock_s)
    if factor is None or motion is None or move is None or core.watch.candidate is not None:
        return
    speed = min(max(factor * move.speed_mm_min, motion.speed_mm_min_min), motion.speed_mm_min_max)
    speed = min(speed, 3.0 * run.plan.expected.speed_mm_min)
    if speed != move.speed_mm_min:
        core.move(Move(MoveKind.LOAD, speed))
        core.emit("speed_corrected", speed_mm_min=speed, rate_n_s=pace.rate_n_s)


def _once(core: Core, run: Run, trip: Trip, what: str) -> bool:
    if what in run.told:
        return False
    run.told.add(what)
    core.tell_limit(trip, what, Severity.CAUTION)
    return True


def _noise(core: Core, run: Run) -> None:
    """Row 17 during the run: above three times the noise at rest for two seconds."""
    level = core.watch.level
    limit_n = NOISE_TIMES * level.sigma_rest_n
    if level.sigma_n <= limit_n:
        run.noisy_since_s = None
        return
    if run.noisy_since_s is None:
        run.noisy_since_s = core.clock_s
    if core.clock_s - run.noisy_since_s < NOISY_S:
        return
    trip = Trip(17, level.sigma_n, limit_n, "N", Reaction.CAUTION)
    if _once(core, run, trip, "noise above the quiet record"):
        core.emit("noise_high", Severity.CAUTION, sigma_n=level.sigma_n, quiet_n=level.sigma_rest_n)


def _absent(core: Core, run: Run) -> None:
    """Row 30: a bar left standing under load."""
    since = run.held_since_s if run.held_since_s is not None else run.contact_s
    if since is None or core.clock_s - since <= ABSENT_S:
        return
    waited_s = core.clock_s - since
    if _once(core, run, Trip(30, waited_s, ABSENT_S, "s", Reaction.CAUTION), "bar left standing under load"):
        core.emit("operator_absent", Severity.CAUTION, waited_s=waited_s)


# --- speed, and going away


def _speed(core: Core) -> None:
    assert core.speed_watch is not None and core.travel is not None
    trip = core.speed_watch.judge(core.clock_s, core.travel)
    if trip is None:
        return
    rate = core.watch.level.slope_n_s
    run = core.run
    rising = run is not None and core.watched and rate > 0.25 * run.plan.expected.rate_n_s
    if core.speed_watch.stands and rising:
        signal.position_lost(core, "it stands still while the force rises")
    else:
        core.trip(trip)


def _arrive(core: Core) -> None:
    """A jog or a return: stop it where its distance is done, then be at rest."""
    move = core.move_now
    if move is None:
        if core.stopping is None:
            core.go(Cause.ARRIVED)
            core.emit("arrived", position_mm=core.raw_position_mm)
        return
    wanted_mm = move.distance_mm if move.distance_mm is not None else 0.0
    resolution_mm = core.travel.resolution_mm if core.travel is not None else 0.0
    if abs(core.moved_mm()) >= wanted_mm - resolution_mm:
        core.stop("distance done")
    elif abs(core.reckoned_mm()) > 1.2 * wanted_mm + abs(core.set_speed_mm_s):
        core.stop("distance overdue")


def _unloading(core: Core) -> None:
    if core.run is not None:
        return
    level_n = core.watch.level.newest_n
    if core.move_now is not None and level_n is not None and abs(level_n) < core.touch_n:
        core.go(Cause.FREED)
    _arrive(core)


def _above(core: Core, net_n: float) -> bool:
    """Shown by two samples at least: a bin's mean, or two bins where a bin is one sample."""
    history = core.watch.level.history
    if core.watch.level.bin_samples > 1:
        return bool(history) and history[-1][1] > net_n
    return len(history) > 1 and history[-1][1] > net_n and history[-2][1] > net_n


def _at_mm(core: Core) -> float | None:
    return core.travel.at_mm if core.travel is not None else None


_STAGES: Mapping[State, Callable[[Core], None]] = {
    State.AT_REST: zero.beat,
    State.READY: _ready,
    State.APPROACHING: _approaching,
    State.IN_CONTACT: _in_contact,
    State.SEATING: _seating,
    State.HOLDING: _holding,
    State.RETURNING: _arrive,
    State.UNLOADING: _unloading,
}
