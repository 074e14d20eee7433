"""The presenter: stale data say so, the first fault is shown, simulated data are marked, every state has an order."""

from __future__ import annotations

from typing import Any

from daq.stream.updates import Update
from daq.watch.values import State
from monitor.presenter import Presenter, Tone
from monitor.wording import BACK_OFF_FIRST, INSTRUCTIONS, fault_text


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


def summary(presenter: Presenter, now_s: float, **values: Any) -> None:
    presenter.take(update("summary", values), now_s)


def test_the_age_of_the_newest_sample_goes_on_growing_between_updates() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "loading"}), 10.0)
    assert text_of(presenter, "data", 10.0) == ("no samples yet", Tone.CAUTION)
    summary(presenter, 10.0, data_age_s=0.05)
    assert text_of(presenter, "data", 10.1) == ("0.1 s old", Tone.PLAIN)
    assert text_of(presenter, "data", 12.0) == ("NOT CURRENT: 2 s old", Tone.CAUTION)


def test_a_silent_machine_is_not_current_however_often_the_station_says_so() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "at rest"}), 0.0)
    for second in range(20):
        summary(presenter, float(second), gross_n=2.4, data_age_s=float(second))
    text, tone = text_of(presenter, "data", 19.0)
    assert text == "NOT CURRENT: 19 s old" and tone is Tone.CAUTION


def test_lost_updates_are_counted_in_the_view() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "at rest"}), 0.0)
    summary(presenter, 0.0, data_age_s=0.0)
    presenter.lost_updates = 17
    assert "17 updates lost" in text_of(presenter, "data", 0.0)[0]


def test_nothing_heard_is_not_an_instruction_to_load() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "loading"}), 0.0)
    assert "stop it at the machine" in text_of(presenter, "do now", 5.0)[0]
    assert text_of(presenter, "state", 60.0)[0] == "station silent for 60 s"
    assert "stop it at the machine" in text_of(presenter, "do now", 60.0)[0]
    assert not presenter.is_current(5.0) and presenter.is_current(1.0)


def test_a_daemon_that_was_ended_is_ended_not_out_of_contact() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "midspan has ended"}), 0.0)
    assert text_of(presenter, "state", 1000.0) == ("midspan has ended", Tone.STOP)


def test_a_late_joiner_sees_what_there_is() -> None:
    presenter = Presenter()
    look = {
        "state": {
            "state": "loading",
            "run": {"specimen": "A-2", "loading": 1},
            "bar": 2,
            "bars": 30,
            "series": "s",
        },
        "summary": {"net_n": 10.0, "gross_n": 12.4, "data_age_s": 0.1},
        "frame": {"name": "lane", "simulated": False, "motion": None},
        "sitting": {"bars": [{"number": "A-1", "result": {"strength_mpa": 300.0, "peak_n": 400.0}}]},
    }
    presenter.take_look(look, 5.0)
    assert text_of(presenter, "frame", 5.0)[0] == "lane   monitor only: midspan cannot stop it"
    assert text_of(presenter, "bar", 5.0)[0] == "A-2 loading 1   bar 2 of 30   s"
    assert text_of(presenter, "last bar", 5.0)[0].startswith("A-1: 300.0 MPa")
    presenter.take(update("result", {"specimen": "A-2", "result": {"strength_mpa": 310.0}}), 6.0)
    assert text_of(presenter, "last bar", 6.0)[0].startswith("A-2: 310.0 MPa")
    assert len(presenter.results) == 2


def test_between_bars_the_next_one_and_the_count_are_named() -> None:
    presenter = Presenter()
    body = {
        "state": "at rest",
        "bars": 30,
        "broken": 4,
        "next": "A-05",
        "series": "s",
        "operator": "A. Person",
    }
    presenter.take(update("state", body), 0.0)
    assert text_of(presenter, "bar", 0.0)[0] == "none called; next A-05; 4 of 30 broken   s"
    assert text_of(presenter, "operator", 0.0)[0] == "A. Person"


def test_trouble_with_the_recording_is_a_caution_of_its_own() -> None:
    presenter = Presenter()
    presenter.take(update("state", {"state": "loading", "reports": {"recorder": {"lag_s": 11.0}}}), 0.0)
    text, tone = text_of(presenter, "recording", 0.0)
    assert "11 s behind" in text and tone is Tone.CAUTION


def closed(presenter: Presenter, *events: str) -> None:
    """A loading of which nothing is open any more; the crosshead stands at 2.1 mm."""
    for name in ("started", "fracture", *events, "run_closed"):
        presenter.take(update("event", {"event": name}), 0.0)
    presenter.take(update("state", {"state": "at rest", "bars": 6, "broken": 1}), 0.0)
    presenter.take(update("summary", {"position_mm": 2.1}), 0.0)


def test_a_crosshead_left_at_the_break_is_sent_back_before_the_next_bar() -> None:
    """Without a back-off of its own the next approach begins at the break and finds no bar (limit 9)."""
    presenter = Presenter()
    closed(presenter)
    told, _ = text_of(presenter, "do now", 0.0)
    assert told == BACK_OFF_FIRST
    presenter.take(update("summary", {"position_mm": 1.9}), 0.0)
    assert text_of(presenter, "do now", 0.0)[0] == BACK_OFF_FIRST
    presenter.take(update("summary", {"position_mm": 0.1}), 0.0)  # by hand, at the machine
    assert text_of(presenter, "do now", 0.0)[0] == INSTRUCTIONS["at rest"]


def test_a_back_off_by_command_or_by_itself_is_enough() -> None:
    by_itself, by_command = Presenter(), Presenter()
    closed(by_itself, "returned")
    closed(by_command)
    by_command.take(update("event", {"event": "returned"}), 0.0)
    for presenter in (by_itself, by_command):
        assert text_of(presenter, "do now", 0.0)[0] == INSTRUCTIONS["at rest"]


def test_a_late_joiner_is_told_to_back_off_also_where_the_position_falls_towards_the_bar() -> None:
    presenter = Presenter()
    look = {
        "frame": {"name": "lane", "simulated": True, "motion": {"position_sign": -1}},
        "state": {"state": "at rest"},
        "summary": {},
        "events": [{"event": "started"}, {"event": "fracture"}, {"event": "run_closed"}],
    }
    presenter.take_look(look, 0.0)
    presenter.take(update("summary", {"position_mm": -2.1}), 0.0)
    assert text_of(presenter, "do now", 0.0)[0] == BACK_OFF_FIRST
    presenter.take(update("summary", {"position_mm": -0.1}), 0.0)
    assert text_of(presenter, "do now", 0.0)[0] == INSTRUCTIONS["at rest"]
