"""Keys: stop on key-down in every state, start only by holding, bursts of devices never a command."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.keys import BURST_S, HOLD_S, QUIET_S, Deed, KeyJudge

FREE = {"repeat": False, "typing": False, "at_rest": False}


def strike(judge: KeyJudge, key: str, now_s: float, **how: bool) -> Deed:
    return judge.down(key, now_s, **{**FREE, **how})


@pytest.mark.parametrize("key", ["Escape", "Space", "F9"])
@pytest.mark.parametrize("typing", [True, False])
def test_a_stop_is_obeyed_on_key_down_wherever_it_is_struck(key: str, typing: bool) -> None:
    judge = KeyJudge(pedal_stop="F9")
    assert strike(judge, key, 1.0, typing=typing) is Deed.STOP
    assert strike(judge, key, 1.001, typing=typing) is Deed.STOP  # no debounce, no burst rule for a stop
    assert strike(judge, key, 1.5, typing=typing, repeat=True) is Deed.NOTHING


def test_at_rest_a_field_takes_spaces_and_escape_leaves_it_but_the_pedal_stops() -> None:
    judge = KeyJudge(pedal_stop="F9")
    assert strike(judge, "Space", 1.0, typing=True, at_rest=True) is Deed.TYPE
    assert strike(judge, "Escape", 2.0, typing=True, at_rest=True) is Deed.LEAVE
    assert strike(judge, "F9", 3.0, typing=True, at_rest=True) is Deed.STOP
    assert strike(judge, "Space", 4.0, at_rest=True) is Deed.STOP  # outside a field it always stops


@pytest.mark.parametrize("key", ["g", "F10"])
def test_a_start_is_held(key: str) -> None:
    judge = KeyJudge(pedal_start="F10")
    strike(judge, key, 1.0)
    assert judge.due(1.0 + HOLD_S - 0.01) == "" and judge.hold_share(1.15) == pytest.approx(0.5)
    assert judge.due(1.0 + HOLD_S) == "start"
    assert judge.due(1.0 + 3 * HOLD_S) == ""  # once


def test_letting_go_a_stop_and_another_key_end_a_hold() -> None:
    for interrupt in ("up", "stop", "other", "focus"):
        judge = KeyJudge()
        strike(judge, "g", 1.0)
        if interrupt == "up":
            judge.up("g", 1.2, repeat=False)
        elif interrupt == "stop":
            strike(judge, "Space", 1.2)
        elif interrupt == "other":
            strike(judge, "x", 1.2)
        else:
            judge.forget()
        assert judge.due(2.0) in ("", "x")


def test_auto_repeat_starts_nothing_and_ends_nothing() -> None:
    judge = KeyJudge()
    strike(judge, "g", 1.0)
    for repeat in range(8):
        strike(judge, "g", 1.05 + 0.03 * repeat, repeat=True)
        judge.up("g", 1.06 + 0.03 * repeat, repeat=True)
    assert judge.due(1.31) == "start"
    strike(judge, "m", 3.0, repeat=True)
    assert judge.due(4.0) == ""


def test_a_single_key_counts_after_a_short_quiet() -> None:
    judge = KeyJudge()
    strike(judge, "m", 1.0)
    assert judge.due(1.0 + QUIET_S / 2) == ""
    assert judge.due(1.0 + QUIET_S) == "m" and judge.due(2.0) == ""


def test_enter_never_comes_to_anything() -> None:
    judge = KeyJudge()
    for key in ("Return", "Enter"):
        strike(judge, key, 1.0)
        assert judge.due(9.0) == ""


@settings(deadline=None, max_examples=60)
@given(
    text=st.text(st.sampled_from("0123456789.,;gbmrLCqne?-+ABCxyz") | st.just("\r"), min_size=2, max_size=24),
    gap_s=st.floats(0.0005, BURST_S),
    typing=st.booleans(),
)
def test_what_a_scanner_sends_is_never_a_command(text: str, gap_s: float, typing: bool) -> None:
    """Scenario 17: "12.03" and Enter in every state. Key-down and key-up of each character, faster than any hand."""
    judge, now_s = KeyJudge(pedal_start="F10"), 1.0
    came = []
    for character in text:
        key = "Return" if character == "\r" else character
        came.append(strike(judge, key, now_s, typing=typing))
        judge.up(key, now_s + gap_s / 2.0, repeat=False)
        came_due = judge.due(now_s + gap_s)
        assert came_due == ""
        now_s += gap_s
    assert judge.due(now_s + 5.0) == "" and Deed.STOP not in came
    if typing:
        assert set(came) == {Deed.TYPE}


def test_a_scanned_space_may_stop() -> None:
    judge = KeyJudge()
    deeds = [
        strike(judge, key, 1.0 + 0.005 * place) for place, key in enumerate(["A", "Space", "7", "Return"])
    ]
    assert deeds.count(Deed.STOP) == 1
    assert judge.due(5.0) == ""


def test_a_bouncing_pedal_does_not_begin_twice() -> None:
    judge = KeyJudge(pedal_start="F10")
    strike(judge, "F10", 1.0)
    judge.up("F10", 1.1, repeat=False)
    strike(judge, "F10", 1.12)
    assert judge.due(2.0) == ""
