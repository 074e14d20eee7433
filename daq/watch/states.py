"""The one table of states and transitions. Decides nothing about samples, only which word follows which cause.

Three promises hold by construction and are checked by tests/watch/test_states.py: a stop cause never leads to
a moving state, a reset only ever leads to rest, and nothing leads from rest to motion but a deliberate start,
jog or return (IEC 60204-1 as publicly summarised: stop overrides start, a reset must not restart).
"""

from __future__ import annotations

from collections.abc import Mapping
from enum import Enum

from daq.watch.values import State


class Cause(Enum):
    """Why a state is left."""

    TARED = "tared"
    STARTED = "started"
    JOGGED = "jog towards the specimen"
    SENT_AWAY = "return"
    SENT_AWAY_LOADED = "return with load on the specimen"
    TOUCHED = "touch"
    SEATING_BEGUN = "seating begun"
    PRELOADED = "preload reached"
    HOLD_BEGUN = "hold begun"
    BROKE = "broke"
    UNLOADED = "shown to be unloaded"
    LOAD_TAKEN_OFF = "load taken off by the operator"
    FREED = "specimen free"
    ARRIVED = "arrived"
    CLOSED = "run closed"
    STOP_ASKED = "stop asked"
    LIMIT_PASSED = "limit passed"
    FAULT = "fault"
    SIGNAL_LOST = "signal lost"
    SIGNAL_BACK = "signal back"
    OVERLOADED = "overload"
    SHIELD_OPENED = "shield opened"
    EMERGENCY = "emergency stop"
    RESET = "reset"


MOVING = frozenset({State.APPROACHING, State.SEATING, State.LOADING, State.UNLOADING, State.RETURNING})
ARMED = frozenset({State.APPROACHING, State.IN_CONTACT, State.SEATING, State.LOADING, State.HOLDING})
WATCHED = frozenset({State.SEATING, State.LOADING, State.HOLDING})
BROKEN = frozenset({State.BROKEN_UNLOADED, State.BROKEN_STILL_LOADED})
LATCHED = frozenset(
    {
        State.STOPPED,
        State.SIGNAL_LOST,
        State.OVERLOAD,
        State.SHIELD_OPEN,
        State.EMERGENCY_STOP,
        State.UNKNOWN,
    }
)

STOPS: Mapping[Cause, State] = {
    Cause.STOP_ASKED: State.STOPPED,
    Cause.LIMIT_PASSED: State.STOPPED,
    Cause.FAULT: State.STOPPED,
    Cause.SHIELD_OPENED: State.SHIELD_OPEN,
    Cause.SIGNAL_LOST: State.SIGNAL_LOST,
    Cause.OVERLOADED: State.OVERLOAD,
    Cause.EMERGENCY: State.EMERGENCY_STOP,
}
# A latched word gives way only to a graver one; a break is not overwritten by the stop that follows it.
_GRAVITY: Mapping[State, int] = {
    State.BROKEN_UNLOADED: 2,
    State.BROKEN_STILL_LOADED: 2,
    State.STOPPED: 1,
    State.SHIELD_OPEN: 2,
    State.SIGNAL_LOST: 3,
    State.OVERLOAD: 4,
    State.EMERGENCY_STOP: 5,
    State.UNKNOWN: 6,
}


def _after_stop(state: State, cause: Cause) -> State:
    target = STOPS[cause]
    return target if _GRAVITY[target] > _GRAVITY.get(state, 0) else state


_FLOW: Mapping[tuple[State, Cause], State] = {
    (State.AT_REST, Cause.TARED): State.READY,
    (State.AT_REST, Cause.JOGGED): State.APPROACHING,
    (State.AT_REST, Cause.SENT_AWAY): State.RETURNING,
    (State.AT_REST, Cause.SENT_AWAY_LOADED): State.UNLOADING,
    (State.AT_REST, Cause.CLOSED): State.AT_REST,
    (
        State.AT_REST,
        Cause.SHIELD_OPENED,
    ): State.AT_REST,  # mounting a bar opens it: blocks the start, trips nothing
    (State.READY, Cause.SHIELD_OPENED): State.AT_REST,  # the bar may have been touched: tare again
    (State.READY, Cause.CLOSED): State.AT_REST,
    (State.READY, Cause.STARTED): State.APPROACHING,
    (State.APPROACHING, Cause.TOUCHED): State.IN_CONTACT,
    (State.APPROACHING, Cause.ARRIVED): State.AT_REST,
    (State.IN_CONTACT, Cause.SEATING_BEGUN): State.SEATING,
    (State.IN_CONTACT, Cause.ARRIVED): State.AT_REST,  # a jog that touched
    (State.SEATING, Cause.PRELOADED): State.LOADING,
    (State.SEATING, Cause.HOLD_BEGUN): State.HOLDING,
    (State.HOLDING, Cause.PRELOADED): State.LOADING,
    (State.SEATING, Cause.BROKE): State.BROKEN_STILL_LOADED,
    (State.LOADING, Cause.BROKE): State.BROKEN_STILL_LOADED,
    (State.HOLDING, Cause.BROKE): State.BROKEN_STILL_LOADED,
    (State.SEATING, Cause.LOAD_TAKEN_OFF): State.UNLOADING,
    (State.LOADING, Cause.LOAD_TAKEN_OFF): State.UNLOADING,
    (State.HOLDING, Cause.LOAD_TAKEN_OFF): State.UNLOADING,
    (State.BROKEN_STILL_LOADED, Cause.UNLOADED): State.BROKEN_UNLOADED,
    (State.BROKEN_STILL_LOADED, Cause.CLOSED): State.BROKEN_STILL_LOADED,
    (State.BROKEN_UNLOADED, Cause.SENT_AWAY): State.RETURNING,
    (State.BROKEN_UNLOADED, Cause.CLOSED): State.AT_REST,
    (State.UNLOADING, Cause.FREED): State.RETURNING,
    (State.UNLOADING, Cause.ARRIVED): State.AT_REST,
    (
        State.UNLOADING,
        Cause.CLOSED,
    ): State.STOPPED,  # the operator took the load off: a new start needs a reset
    (State.RETURNING, Cause.ARRIVED): State.AT_REST,
    (State.RETURNING, Cause.CLOSED): State.RETURNING,
    (State.SIGNAL_LOST, Cause.SIGNAL_BACK): State.AT_REST,  # only where nothing moved and no run was open
}
_KEPT: Mapping[tuple[State, Cause], State] = {(state, Cause.CLOSED): state for state in LATCHED}
_RESET: Mapping[tuple[State, Cause], State] = {
    (state, Cause.RESET): State.AT_REST for state in LATCHED | BROKEN
}

TABLE: Mapping[tuple[State, Cause], State] = {
    **{(state, cause): _after_stop(state, cause) for state in State for cause in STOPS},
    **_KEPT,
    **_RESET,
    **_FLOW,
}


def next_state(state: State, cause: Cause) -> State | None:
    """The state that follows, or None where the table has no such step (a programming error of the caller)."""
    return TABLE.get((state, cause))
