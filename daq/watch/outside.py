"""What comes from outside the samples: status inputs of the machine, faults of drivers and processes."""

from __future__ import annotations

from daq.watch import signal
from daq.watch.core import Core
from daq.watch.faults import FAULTS, UNLISTED
from daq.watch.limits import Reaction, Trip
from daq.watch.states import ARMED, MOVING, Cause
from daq.watch.values import Severity, State, Verdict


def status_input(core: Core, name: str, active: bool | None) -> None:
    """Row 25 and the end switches. Not known is a fault wherever something moves."""
    if name not in core.inputs or core.inputs[name] is active:
        return
    core.inputs[name] = active
    core.emit("input", name=name, active=active)
    moving = core.moving or core.state in MOVING or core.state in ARMED
    if active is None and moving and name != "moving":
        _danger(core, f"{name.replace('_', ' ')} is not known", Cause.FAULT)
    if active is not True:
        return
    if name == "shield_open" and core.run is not None and core.run.ended:
        core.run.no_back_off = True  # shutting it again must start nothing
    if name == "emergency_stop":
        _danger(core, "emergency stop", Cause.EMERGENCY)
    elif name == "drive_fault":
        _danger(core, "drive fault", Cause.FAULT)
    elif name == "shield_open" and moving:
        _danger(core, "shield open", Cause.SHIELD_OPENED)
    elif name == "shield_open" and core.state is State.READY:
        _tare_void(core)
    elif name in ("end_up", "end_down") and moving:
        _danger(core, "end switch", Cause.FAULT)


def _tare_void(core: Core) -> None:
    """The shield was opened before the start: the bar may have been touched, so the zero is taken again."""
    core.go(Cause.SHIELD_OPENED, "shield open: zero to be taken again")
    if core.run is not None:
        core.run.note, core.collector = None, None


def _danger(core: Core, what: str, cause: Cause) -> None:
    if core.monitor_only:
        core.tell_limit(Trip(25, 1.0, 0.0, "", Reaction.STOP), what, Severity.STOP)
        return
    core.stop(what, cause)
    core.tell_limit(Trip(25, 1.0, 0.0, "", Reaction.STOP), what, Severity.STOP)
    core.end_run(Verdict.STOPPED, what)


def fault(core: Core, name: str, detail: str, where: str = "") -> None:
    """A named fault. Where nothing moves and no run is open it is told, and may block the start, but latches
    nothing: restarting the station between two bars must not cost a reset.
    """
    reaction = FAULTS.get(name, UNLISTED)
    if reaction.blocks_start:
        said = ": ".join(part for part in (where, detail) if part)
        core.blocks[name, where] = f"{reaction.what} ({said})" if said else reaction.what
    at_stake = core.run is not None or core.moving or core.stopping is not None
    if core.monitor_only and reaction.cause is not Cause.SIGNAL_LOST:
        at_stake = False  # told only: the recording goes on, as the machine does
    stops = reaction.cause is not None and at_stake
    if reaction.cause is not None and at_stake:
        core.stop(reaction.what, reaction.cause)
    core.emit(
        "fault",
        reaction.severity,
        name=name,
        detail=detail,
        what=reaction.what,
        did="stopped" if stops else "told",
        do_now=reaction.do_now,
        first=core.is_first(reaction.what) if stops else False,
    )
    if stops:
        lost = reaction.cause is Cause.SIGNAL_LOST
        core.end_run(Verdict.SIGNAL_LOST if lost else Verdict.STOPPED, reaction.what)
    elif reaction.cause is Cause.SIGNAL_LOST:
        signal.lost(core, reaction.what)
