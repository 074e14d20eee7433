"""The table of states: three promises, and that every word can be reached and left."""

from __future__ import annotations

from itertools import product

import pytest

from daq.watch.states import ARMED, BROKEN, LATCHED, MOVING, STOPS, TABLE, Cause, next_state
from daq.watch.values import State

STARTS = {Cause.STARTED, Cause.JOGGED, Cause.SENT_AWAY, Cause.SENT_AWAY_LOADED}
ON_THE_WAY = {  # motion that only continues what a deliberate start began
    (State.IN_CONTACT, Cause.SEATING_BEGUN),
    (State.HOLDING, Cause.PRELOADED),
    (State.HOLDING, Cause.LOAD_TAKEN_OFF),  # the operator's own hand moves it, midspan commands a stop
}


@pytest.mark.parametrize(("state", "cause"), list(product(State, STOPS)))
def test_a_stop_is_known_in_every_state_and_never_leads_to_motion(state: State, cause: Cause) -> None:
    after = next_state(state, cause)
    assert after is not None
    assert after not in MOVING


def test_a_reset_leads_to_rest_and_is_known_where_something_is_latched() -> None:
    for state in State:
        after = next_state(state, Cause.RESET)
        assert after is (State.AT_REST if state in LATCHED | BROKEN else None)


def test_nothing_but_a_deliberate_start_leads_from_rest_to_motion() -> None:
    for (state, cause), after in TABLE.items():
        if state not in MOVING and after in MOVING:
            assert cause in STARTS or (state, cause) in ON_THE_WAY, (state, cause, after)


def test_a_latched_word_gives_way_only_to_a_graver_one_or_a_reset() -> None:
    for (state, cause), after in TABLE.items():
        if state in LATCHED and after is not state:
            healed = (state, cause) == (State.SIGNAL_LOST, Cause.SIGNAL_BACK)
            assert after in LATCHED or cause is Cause.RESET or healed


def test_unknown_is_left_by_a_reset_alone() -> None:
    leaves = {
        cause for (state, cause), after in TABLE.items() if state is State.UNKNOWN and after is not state
    }
    assert leaves == {Cause.RESET}


def test_every_state_can_be_reached_and_left() -> None:
    reached = {after for (state, _), after in TABLE.items() if after is not state}
    left = {state for (state, _), after in TABLE.items() if after is not state}
    assert reached == set(State) - {State.UNKNOWN}  # unknown is where an unclean start begins
    assert left == set(State)


def test_a_break_is_never_armed_and_a_holding_frame_is() -> None:
    assert not BROKEN & ARMED
    assert State.HOLDING in ARMED and State.HOLDING not in MOVING
