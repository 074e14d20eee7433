"""Requests: what the operator's seat (through the station) may ask of the watch. Values only."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias


@dataclass(frozen=True, slots=True)
class StopRequest:
    """Always obeyed, in every state, before anything else."""

    who: str = "operator"


@dataclass(frozen=True, slots=True)
class OpenRun:
    """Mounted and shut: open the loading of one bar; tare, then state ready. Cards travel as resolved JSON.

    run: {"run_id": uuid text, "series": name, "specimen": number, "loading": int >= 1, "operator": name, ...}
    """

    run: Mapping[str, Any]
    specimen: Mapping[str, Any]
    method: Mapping[str, Any]
    fixture: str
    tare_override_reason: str = ""


@dataclass(frozen=True, slots=True)
class StartRun:
    """The deliberate start; only from ready, refused with the list of missing conditions."""


@dataclass(frozen=True, slots=True)
class CloseRun:
    """End the open loading without a break (operator's decision); the run is recorded as interrupted."""

    reason: str


@dataclass(frozen=True, slots=True)
class Jog:
    """Move by a distance; positive = towards the specimen. Clamped by the approach limit."""

    distance_mm: float
    speed_mm_min: float


@dataclass(frozen=True, slots=True)
class ReturnCrosshead:
    """Back off from the specimen."""

    distance_mm: float
    speed_mm_min: float


@dataclass(frozen=True, slots=True)
class Reset:
    """Clear a latched stop. Never starts anything. looked: the operator has looked at the frame (state
    unknown).
    """

    who: str
    looked: bool = False


@dataclass(frozen=True, slots=True)
class Note:
    """A time-stamped remark by one key."""

    text: str


@dataclass(frozen=True, slots=True)
class TightenLimit:
    """Lower a limit; widening is refused while loading."""

    key: str
    value: float


@dataclass(frozen=True, slots=True)
class Prove:
    """The wizard's word: polarity pushed by hand, stop drill done. Lifts the lock that a wrong sign has set."""

    who: str
    polarity: bool
    stop_drill: bool


@dataclass(frozen=True, slots=True)
class CheckCell:
    """After an overload: weight_n 0 looks at the zero of the bare cell, then a known weight lifts the lock."""

    who: str
    weight_n: float


@dataclass(frozen=True, slots=True)
class TakeSeat:
    """A named person has taken the operator's seat. before: whose it was, "" where it was free."""

    operator: str
    before: str


@dataclass(frozen=True, slots=True)
class TellFault:
    """The station has found a fault that only it can see: a name of daq.watch.faults."""

    name: str
    detail: str


@dataclass(frozen=True, slots=True)
class FaultOver:
    """It is over, and blocks the start no longer."""

    name: str


Request: TypeAlias = (
    StopRequest
    | OpenRun
    | StartRun
    | CloseRun
    | Jog
    | ReturnCrosshead
    | Reset
    | Note
    | TightenLimit
    | Prove
    | CheckCell
    | TakeSeat
    | TellFault
    | FaultOver
)
