"""The words of the watch: states, reasons, requests, actions, events. Values only; nothing here decides."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import TypeAlias


class State(Enum):
    """The trade's words for what the frame is doing; the transitions stand in daq.watch.states only."""

    AT_REST = "at rest"
    READY = "ready"
    APPROACHING = "approaching"
    IN_CONTACT = "in contact"
    SEATING = "seating"
    LOADING = "loading"
    HOLDING = "holding"
    BROKEN_UNLOADED = "broken - unloaded"
    BROKEN_STILL_LOADED = "broken? - still loaded"
    STOPPED = "stopped"
    UNLOADING = "unloading"
    RETURNING = "returning"
    SIGNAL_LOST = "signal lost"
    OVERLOAD = "overload"
    SHIELD_OPEN = "shield open"
    EMERGENCY_STOP = "emergency stop"
    UNKNOWN = "unknown - look at the frame"


class Severity(Enum):
    REMARK = "remark"
    CAUTION = "caution"
    STOP = "stop"
    EMERGENCY = "emergency"


class Verdict(Enum):
    """What kind of end a loading had."""

    SUDDEN_BREAK = "sudden break"
    GRADUAL_FAILURE = "gradual failure"
    SIGNAL_LOST = "signal lost - specimen may be loaded"
    UNLOADED = "operator unload"
    STOPPED = "stopped"
    UNCLEAR = "unclear - look"


Json: TypeAlias = str | int | float | bool | tuple["Json", ...] | Mapping[str, "Json"] | None


@dataclass(frozen=True, slots=True)
class Event:
    """A fact, in the log, the record and the feed alike. name: one of daq.watch.catalogue.EVENTS."""

    name: str
    time_s: float
    severity: Severity = Severity.REMARK
    fields: Mapping[str, Json] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Stop:
    """Bring the crosshead to rest now. `attempt` counts repeats of the same stop."""

    reason: str
    attempt: int = 1


class MoveKind(Enum):
    APPROACH = "approach"
    LOAD = "load"
    JOG = "jog"
    RETURN = "return"


@dataclass(frozen=True, slots=True)
class Move:
    """Set the crosshead moving. Positive speed = towards the specimen. rate_n_s: the machine's own force
    loop.
    """

    kind: MoveKind
    speed_mm_min: float
    distance_mm: float | None = None
    rate_n_s: float | None = None


Action: TypeAlias = Stop | Move


@dataclass(frozen=True, slots=True)
class Step:
    """What one advance decided. Obey the actions in order, then record, then show."""

    actions: tuple[Action, ...] = ()
    events: tuple[Event, ...] = ()


NOTHING = Step()
