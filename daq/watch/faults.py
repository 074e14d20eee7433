"""Faults told from outside the pure core: what each name means and what is done. One table, no logic."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from daq.watch.states import Cause
from daq.watch.values import Severity


@dataclass(frozen=True, slots=True)
class Reaction:
    """cause None: told only. blocks_start: no run can start until `fault_over` is told."""

    severity: Severity
    cause: Cause | None
    blocks_start: bool
    what: str
    do_now: str


_STOP, _CAUTION, _REMARK = Severity.STOP, Severity.CAUTION, Severity.REMARK

FAULTS: Mapping[str, Reaction] = {
    "link_lost": Reaction(
        _STOP, Cause.SIGNAL_LOST, True, "the link to the machine is lost", "look at the cable"
    ),
    "unknown_reply": Reaction(
        _STOP, Cause.FAULT, False, "the machine answered what the card does not know", "look at it"
    ),
    "not_answered": Reaction(
        _STOP, Cause.FAULT, False, "the machine did not answer", "look at the controller"
    ),
    "protocol": Reaction(
        _STOP, Cause.SIGNAL_LOST, False, "too many damaged packets", "look at cable and card"
    ),
    "too_fast": Reaction(
        _STOP, Cause.SIGNAL_LOST, False, "far more rows than the card declares", "look at rate and card"
    ),
    "move_refused": Reaction(
        _STOP, Cause.FAULT, False, "the drive cannot do the move that was due", "look at the motion table"
    ),
    "bench_late": Reaction(
        _STOP, Cause.FAULT, False, "the stopper had to act: the bench was late", "look for what held it up"
    ),
    "stopper_lost": Reaction(_STOP, Cause.FAULT, True, "the stopper process is gone", "restart midspan"),
    "recorder_lag": Reaction(
        _STOP, Cause.FAULT, False, "the recorder is more than 45 s behind", "look at the disk"
    ),
    "recorder_slow": Reaction(
        _CAUTION, None, False, "the recorder is more than 10 s behind", "look at the disk"
    ),
    "ring_full": Reaction(_STOP, Cause.FAULT, False, "the ring is full", "look at disk and recorder"),
    "disk_low": Reaction(_CAUTION, None, True, "too little room on the disk for a series", "make room"),
    "station_silent": Reaction(
        _STOP, Cause.FAULT, False, "the operator's seat is silent", "look at the station"
    ),
    "suspended": Reaction(_STOP, Cause.SIGNAL_LOST, False, "the computer slept", "switch its sleep mode off"),
    "clock_step": Reaction(_REMARK, None, False, "the wall clock was set by more than 0.5 s", "nothing"),
}
UNLISTED = Reaction(_STOP, Cause.FAULT, False, "a fault without an entry in the table", "look at the frame")
