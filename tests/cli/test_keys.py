"""Keys: a stop is heard in anything, a movement only in two deliberate strokes, nothing at all in a burst."""

from __future__ import annotations

import os
import string
import time
from collections.abc import Callable, Iterator

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.cli.keys import GO_WINDOW_S, LEAVE, QUIET_S, Keyboard, Strokes

PERSON_S = 0.15
GAUGE_S = 0.008
PLAIN = [chr(code) for code in range(33, 127)] + ["\r", "\n", "\t", "\x7f"]


def typed(strokes: Strokes, *struck: tuple[str, float]) -> list[str]:
    """Keys that come of it; the time after each stroke is given, and after the last a long quiet."""
    now_s, found = 100.0, []
    for text, then_s in struck:
        strokes.strike(text, now_s)
        until_s = now_s + then_s
        while now_s < until_s - 1e-9:
            now_s = min(until_s, now_s + 0.01)
            found += [key for key in [strokes.due(now_s)] if key]
    found += [key for key in [strokes.due(now_s + 10.0)] if key]
    return found


def test_two_deliberate_strokes_start_and_back_off() -> None:
    assert typed(Strokes(), ("G", PERSON_S), ("O", PERSON_S)) == ["G", "GO"]
    assert typed(Strokes(), ("B", PERSON_S), ("O", PERSON_S)) == ["B", "BO"]


@pytest.mark.parametrize(
    "struck",
    [
        (("G", GO_WINDOW_S + 0.1), ("O", PERSON_S)),  # too late
        (("O", PERSON_S), ("G", PERSON_S)),
        (("G", PERSON_S), ("\r", PERSON_S), ("O", PERSON_S)),  # something between
        (("G", PERSON_S), ("m", PERSON_S), ("O", PERSON_S)),
        (("g", PERSON_S), ("o", PERSON_S)),
        (("G", PERSON_S), ("G", PERSON_S)),  # a key that is held down repeats itself
        (("GO", PERSON_S),),
        (("G", GAUGE_S), ("O", PERSON_S)),
        (("G", PERSON_S), ("O", GAUGE_S), ("1", PERSON_S)),  # the O opens a burst
        (("7", GAUGE_S), ("G", PERSON_S), ("O", PERSON_S)),  # the G closes one
        (("G", PERSON_S), ("12.345\r", PERSON_S), ("O", PERSON_S)),
    ],
    ids=str,
)
def test_nothing_else_moves_anything(struck: tuple[tuple[str, float], ...]) -> None:
    assert not {"GO", "BO"}.intersection(typed(Strokes(), *struck))


@settings(deadline=None, max_examples=200)
@given(st.lists(st.tuples(st.sampled_from(PLAIN), st.floats(0.0, QUIET_S * 0.9)), min_size=2, max_size=60))
def test_no_burst_is_ever_a_key(struck: list[tuple[str, float]]) -> None:
    """Characters that come faster than a person strikes: the last one too, which the quiet follows."""
    assert typed(Strokes(), *struck) == []


@settings(deadline=None, max_examples=200)
@given(st.text(alphabet="".join(PLAIN), max_size=40), st.sampled_from(" \x1b\x03"), st.text(max_size=40))
def test_a_stop_is_heard_in_any_burst_and_forgets_what_was_armed(before: str, stop: str, after: str) -> None:
    strokes = Strokes()
    strokes.strike("G", 100.0)
    assert strokes.due(100.2) == "G"
    assert strokes.stops(before + stop + after)
    strokes.strike("O", 100.6)
    assert strokes.due(100.8) == ""


@pytest.mark.parametrize("key", sorted(set(string.printable) - set(" \x0b\x0c")))
def test_no_single_key_stops_or_moves_but_the_stop_keys(key: str) -> None:
    strokes = Strokes()
    assert not strokes.stops(key)
    assert not {"GO", "BO"}.intersection(typed(strokes, (key, PERSON_S)))


# --- the thread


@pytest.fixture
def keyboard() -> Iterator[tuple[Keyboard, int, list[str]]]:
    """A keyboard on a pipe; what it stopped, by whom."""
    read_end, write_end = os.pipe()
    stopped: list[str] = []

    def stop(who: str) -> str:
        stopped.append(who)
        return ""

    keys = Keyboard(read_end, stop)
    keys.start()
    try:
        yield keys, write_end, stopped
    finally:
        keys.end()
        os.close(read_end)


def until(test: Callable[[], object]) -> None:
    until_s = time.monotonic() + 5.0
    while not test():
        assert time.monotonic() < until_s
        time.sleep(0.002)


@pytest.mark.slow
def test_the_thread_stops_at_once_and_hands_on_single_keys(
    keyboard: tuple[Keyboard, int, list[str]],
) -> None:
    keys, terminal, stopped = keyboard
    os.write(terminal, b"m")
    assert keys.keys.get(timeout=5.0) == "m"
    os.write(terminal, b"4.017 mm\r")
    until(lambda: stopped)
    assert stopped == ["operator's key"] and keys.stops.get(timeout=5.0) == ""
    os.close(terminal)
    assert keys.keys.get(timeout=5.0) == LEAVE
    until(lambda: len(stopped) == 2)
    assert stopped[1] == "operator's terminal gone"


@pytest.mark.slow
def test_ctrl_c_stops_and_leaves(keyboard: tuple[Keyboard, int, list[str]]) -> None:
    keys, terminal, stopped = keyboard
    os.write(terminal, b"\x03")
    assert keys.keys.get(timeout=5.0) == LEAVE
    assert stopped == ["operator's key"]
    os.close(terminal)


@pytest.mark.slow
def test_a_full_queue_holds_nobody(keyboard: tuple[Keyboard, int, list[str]]) -> None:
    """Nobody takes the answers of two hundred stops; each one is obeyed all the same."""
    _, terminal, stopped = keyboard
    for count in range(1, 201):
        os.write(terminal, b" ")
        until(lambda count=count: len(stopped) >= count)  # type: ignore[misc]
    os.close(terminal)
    assert stopped[:200] == ["operator's key"] * 200
