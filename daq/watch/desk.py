"""The desk: what a person may ask, and the list of missing conditions where it cannot be done.

Stop is always obeyed. Reset clears a latch and never starts anything. Nothing else moves the frame but
StartRun, Jog and ReturnCrosshead, each only from rest and each with every condition shown to hold.
"""

from __future__ import annotations

from math import isfinite

from daq.errors import Refused
from daq.watch import aftermath, cellcheck, outside
from daq.watch.core import Core, Run
from daq.watch.limits import INFINITE
from daq.watch.motion import approach_mm_min
from daq.watch.requests import (
    CheckCell,
    CloseRun,
    FaultOver,
    Jog,
    Note,
    OpenRun,
    Prove,
    Request,
    Reset,
    ReturnCrosshead,
    StartRun,
    StopRequest,
    TakeSeat,
    TellFault,
    TightenLimit,
)
from daq.watch.setup import Proven, run_setup
from daq.watch.states import ARMED, BROKEN, LATCHED, Cause
from daq.watch.values import Move, MoveKind, Severity, State, Verdict

TOUCH_SEEN_BINS = 2.0  # a touch is shown by a whole bin, begun at any time


def handle(core: Core, request: Request) -> None:
    """Obey, or raise Refused."""
    if isinstance(request, StopRequest):
        _stop(core, request)
    elif isinstance(request, OpenRun):
        _open(core, request)
    elif isinstance(request, StartRun):
        _start(core)
    elif isinstance(request, CloseRun):
        _close(core, request)
    elif isinstance(request, Jog):
        _jog(core, request)
    elif isinstance(request, ReturnCrosshead):
        _return(core, request)
    elif isinstance(request, Reset):
        _reset(core, request)
    elif isinstance(request, Note):
        core.emit("note", text=request.text)
    elif isinstance(request, TightenLimit):
        _tighten(core, request)
    elif isinstance(request, TakeSeat):
        core.emit("seat_taken", operator=request.operator, before=request.before)
    elif isinstance(request, CheckCell):
        cellcheck.check(core, request)
    elif isinstance(request, TellFault):
        outside.fault(core, request.name, request.detail)
    elif isinstance(request, FaultOver):
        core.blocks.pop((request.name, ""), None)
    else:
        _prove(core, request)


def _require(command: str, missing: list[str]) -> None:
    if missing:
        raise Refused(command, tuple(missing))


def _stop(core: Core, request: StopRequest) -> None:
    reason = f"stop by {request.who}"
    if core.monitor_only:
        core.emit("note", Severity.CAUTION, text=f"{reason}: monitor only, midspan has nothing to stop with")
        return
    core.stop(reason, Cause.STOP_ASKED)
    if core.run is not None:
        core.end_run(Verdict.STOPPED, reason)


# --- a run


def _open(core: Core, request: OpenRun) -> None:
    missing = core.busy_why()
    if core.cell_locked_s is not None:
        missing.append(cellcheck.LOCKED)
    if core.run is not None:
        missing.append("a run is open")
    elif core.state is not State.AT_REST:
        missing.append(f"state is {core.state.value}")
    plan = run_setup(core.setup, request)
    if isinstance(plan, tuple):
        missing += plan
    _require("open run", sorted(set(missing)))
    assert not isinstance(plan, tuple)
    core.run = Run(plan)
    core.first_cause = ""
    core.tripped_rows.clear()
    core.judge.outliers = 0
    core.limits_for_run()
    run = plan.run
    core.emit(
        "run_opened",
        run_id=str(run["run_id"]),
        series=str(run["series"]),
        loading=run["loading"],
        operator=str(run["operator"]),
        specimen=str(run["specimen"]),
        tare_override_reason=plan.tare_override_reason,
        **core.cards(plan),
    )


def _start(core: Core) -> None:
    run, motion = core.run, core.setup.frame.motion
    if core.monitor_only:
        raise Refused(
            "start", ("monitor only: start the machine by its own controls; the touch begins the run",)
        )
    missing = core.busy_why()
    if core.state is not State.READY:
        missing.append(f"state is {core.state.value}")
    if not core.proven.stop_drill:
        missing.append("the stop drill has not been done on this frame")
    net_n = core.watch.level.newest_n
    if core.state is State.READY and (net_n is None or not abs(net_n) < core.touch_n):
        missing.append("the force is not at zero" if net_n is None else f"{net_n:.3g} N rest on the cell")
    _require("start", missing)
    assert run is not None and motion is not None
    speed = _approach_speed(core, motion.approach_mm_min)
    run.started_s, run.start_mm = core.clock_s, core.travel.at_mm if core.travel else None
    core.go(Cause.STARTED)
    core.move(Move(MoveKind.APPROACH, speed, motion.gap_mm + 1.0))
    core.emit("started", speed_mm_min=speed)


def _approach_speed(core: Core, asked_mm_min: float) -> float:
    """Row 7: what is asked, or what leaves half the cell in hand against a blocked fixture."""
    motion = core.setup.frame.motion
    assert motion is not None
    seen_s = TOUCH_SEEN_BINS * core.watch.level.bin_samples / core.setup.rate_hz + core.setup.lag_s
    allowed = approach_mm_min(motion, core.setup.capacity_n, core.touch_n, seen_s)
    allowed = min(allowed, motion.speed_mm_min_max)
    if allowed < motion.speed_mm_min_min:
        raise Refused("move", (f"no safe approach speed: {allowed:.3g} mm/min would be needed",))
    if asked_mm_min <= allowed:
        return asked_mm_min
    core.emit("speed_clamped", Severity.CAUTION, asked_mm_min=asked_mm_min, given_mm_min=allowed)
    return allowed


def _close(core: Core, request: CloseRun) -> None:
    run = core.run
    _require("close run", [] if run is not None else ["no run is open"])
    if run is None or run.ended:
        return
    if core.state in ARMED or core.moving:
        core.stop(f"closed by the operator: {request.reason}", Cause.STOP_ASKED)
        core.end_run(Verdict.STOPPED, request.reason)
        return
    core.end_run(Verdict.STOPPED, request.reason)
    aftermath.close(core)


# --- moves outside a run


def _jog(core: Core, request: Jog) -> None:
    if not isfinite(request.distance_mm) or not request.speed_mm_min > 0 or request.distance_mm == 0:
        raise Refused("jog", ("distance and speed must be numbers, speed above zero",))
    if request.distance_mm < 0:
        _return(core, ReturnCrosshead(-request.distance_mm, request.speed_mm_min))
        return
    missing = _move_missing(core)
    level_n = core.watch.level.newest_n
    if (
        level_n is None
        or not abs(core.gross_n - core.setup.frame.cell.zero_balance_n) < 0.1 * core.setup.capacity_n
    ):
        missing.append("the force at rest is not near zero")
    if core.cell_locked_s is not None:
        missing.append(cellcheck.LOCKED)
    _require("jog", missing)
    assert level_n is not None
    core.jog_base_n = level_n
    speed = _approach_speed(core, request.speed_mm_min)
    core.go(Cause.JOGGED)
    core.move(Move(MoveKind.JOG, speed, request.distance_mm))
    core.emit("jogged", distance_mm=request.distance_mm, speed_mm_min=speed)


def _return(core: Core, request: ReturnCrosshead) -> None:
    if not request.distance_mm > 0 or not request.speed_mm_min > 0:
        raise Refused("return", ("distance and speed must be above zero",))
    motion = core.setup.frame.motion
    _require("return", _move_missing(core))
    assert motion is not None
    speed = min(max(request.speed_mm_min, motion.speed_mm_min_min), motion.speed_mm_min_max)
    loaded = abs(core.watch.level.newest_n or 0.0) > core.touch_n
    core.go(Cause.SENT_AWAY_LOADED if loaded else Cause.SENT_AWAY)
    core.move(Move(MoveKind.RETURN, -speed, request.distance_mm))
    core.emit("returned", distance_mm=request.distance_mm, speed_mm_min=speed)


def _move_missing(core: Core) -> list[str]:
    missing = core.busy_why()
    if core.setup.frame.motion is None:
        missing.append("the frame card has no motion section")
    if core.run is not None:
        missing.append("a run is open")
    if core.state is not State.AT_REST:
        missing.append(f"state is {core.state.value}")
    return sorted(set(missing))


# --- reset, limits, proofs


def _reset(core: Core, request: Reset) -> None:
    missing = [] if core.state in LATCHED | BROKEN else [f"nothing to reset in state {core.state.value}"]
    if core.run is not None:
        missing.append("the run is not closed yet")
    if core.stopping is not None:
        missing.append("the crosshead has not been seen to stand")
    if not isfinite(core.gross_n):
        missing.append("no force signal")
    if core.travel is not None and core.travel.at_mm is None:
        missing.append("no position signal")
    must_look = core.state in (State.UNKNOWN, State.OVERLOAD, State.BROKEN_STILL_LOADED)
    if must_look and not request.looked:
        missing.append("look at the frame first")
    if core.state is not State.UNKNOWN:
        missing += [
            f"{name.replace('_', ' ')} is active" for name, on in core.inputs.items() if on and _bars(name)
        ]
    _require("reset", missing)
    core.emit("reset", who=request.who, looked=request.looked)
    core.first_cause = ""
    core.tripped_rows.clear()
    core.go(Cause.RESET, f"reset by {request.who}")


def _bars(name: str) -> bool:
    return name in ("shield_open", "emergency_stop", "drive_fault")


def _tighten(core: Core, request: TightenLimit) -> None:
    run = core.run
    if run is None:
        raise Refused("tighten limit", ("no run is open",))
    before = {"force_n_max": core.limits.ceiling_n, "travel_mm_max": run.travel_mm_max or INFINITE}.get(
        request.key
    )
    if before is None:
        raise Refused("tighten limit", (f"no limit {request.key!r}: force_n_max or travel_mm_max",))
    if not 0 < request.value <= before:
        raise Refused(
            "tighten limit", (f"{request.key} = {request.value:g}: must be above 0 and at most {before:g}",)
        )
    run.tight[request.key] = request.value
    if request.key == "force_n_max":
        core.use_limits(core.limits.tightened(request.value))
    else:
        run.travel_mm_max = request.value
        core.set_bands()
    known = before if isfinite(before) else None
    core.emit("limit_tightened", key=request.key, value=request.value, before=known)


def _prove(core: Core, request: Prove) -> None:
    _require("prove", [] if core.state not in ARMED and not core.moving else ["the frame is moving"])
    core.proven = Proven(request.polarity, request.stop_drill)
    if request.polarity:
        core.polarity_locked_s = None
    core.emit("proven", polarity=request.polarity, stop_drill=request.stop_drill, who=request.who)
