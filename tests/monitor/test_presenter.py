"""The presenter: stale data say so, the first fault is shown, simulated data are marked, every state has an order."""

from __future__ import annotations

from typing import Any

from daq.stream.updates import Update
from daq.watch.values import State
from monitor.presenter import Presenter, Tone
from monitor.wording import INSTRUCTIONS, fault_text


def update(kind: str, body: dict[str, Any], *, simulated: bool = True) -> Update:
    return Update(1, kind, "kiln-lane-a", "2026-01-01T00:00:00.000+00:00", simulated, body)


def text_of(presenter: Presenter, label: str, now_s: float) -> tuple[str, Tone]:
    line = next(line for line in presenter.lines(now_s) if line.label == label)
    return line.text, line.tone


def test_every_state_has_an_instruction() -> None:
    assert {state.value for state in State} <= set(INSTRUCTIONS)


def test_old_data_are_said_to_be_not_current() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "loading"}), 10.0)
    assert text_of(presenter, "state", 12.9)[1] is Tone.PLAIN
    assert text_of(presenter, "state", 13.1) == ("loading (not current)", Tone.OLD)
    assert text_of(presenter, "state", 21.0)[1] is Tone.STOP


def test_simulated_data_are_marked() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "at rest"}), 0.0)
    assert "SIMULATED" in text_of(presenter, "frame", 0.0)[0]
    presenter.take(update("state", {"state": "at rest"}, simulated=False), 0.0)
    assert "SIMULATED" not in text_of(presenter, "frame", 0.0)[0]


def test_the_first_grave_fault_is_shown_not_its_followers() -> None:
    faults = [
        {"event": "glitch", "severity": "caution"},
        {
            "event": "limit",
            "severity": "stop",
            "what": "cell working",
            "value": 951.0,
            "limit": 900.0,
            "unit": "N",
        },
        {"event": "stop_failed", "severity": "emergency", "what": "second"},
    ]
    presenter = Presenter()
    presenter.take(update("state", {"state": "stopped", "faults": faults}), 0.0)
    assert text_of(presenter, "fault", 0.0) == ("cell working; 951 N, limit 900 N   (+1 more)", Tone.STOP)


def test_numbers_that_are_missing_are_dashes() -> None:
    presenter = Presenter()
    presenter.take(update("summary", {"net_n": 12.34, "stress_mpa": None}), 0.0)
    presenter.take(update("state", {"state": "loading"}), 0.0)
    assert text_of(presenter, "load", 0.0)[0] == "12.3 N net   - gross"
    assert text_of(presenter, "stress", 0.0)[0] == "-   -"


def test_a_fault_without_words_still_says_its_name() -> None:
    assert fault_text({"event": "signal_lost"}) == "signal lost"
