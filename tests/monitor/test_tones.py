"""Tones: which moments are heard, and that a fault goes on until it is reset."""

from __future__ import annotations

from monitor.presenter import Tone
from monitor.tones import FAULT_EVERY_S, Tones


def test_moments_are_told_apart_by_their_number() -> None:
    tones = Tones()
    heard = [
        tones.of_event({"event": "seated", "severity": "remark"}),
        tones.of_event({"event": "second_look", "severity": "caution"}),
        tones.of_event({"event": "fracture", "severity": "remark"}),
    ]
    assert len(set(heard)) == 3 and 0 not in heard
    assert tones.of_event({"event": "note", "severity": "remark"}) == 0


def test_a_fault_is_heard_until_it_is_reset() -> None:
    tones = Tones()
    heard = [tones.of_state(Tone.STOP, 0.5 * turn) for turn in range(9)]
    assert heard == [1, 0, 0, 0, 1, 0, 0, 0, 1] and FAULT_EVERY_S == 2.0
    assert tones.of_state(Tone.GOOD, 5.0) == 0
    assert tones.of_state(Tone.STOP, 5.1) == 1  # the next fault at once
