"""Words: numbers with units and no negative zero, results that claim no strength they have not, refusals in lines."""

from __future__ import annotations

import math

import pytest

from daq.watch.faults import FAULTS
from monitor.wording import (
    BAR_CELLS,
    INSTRUCTIONS,
    expected_text,
    fault_text,
    instruction,
    load_bar,
    number,
    recording_text,
    refusal_lines,
    result_text,
    sealed_lines,
)


@pytest.mark.parametrize(
    ("value", "decimals", "unit", "said"),
    [
        (None, 1, "N", "-"),
        (math.nan, 1, "N", "-"),
        (-0.04, 1, "N", "0.0 N"),
        (-0.06, 1, "N", "-0.1 N"),
        (-0.4, 0, "%", "0 %"),
        (1234.56, 1, "N", "1234.6 N"),
        (2.5, 2, "", "2.50"),
    ],
)
def test_numbers(value: float | None, decimals: int, unit: str, said: str) -> None:
    assert number(value, decimals, unit) == said


@pytest.mark.parametrize("percent", [-300.0, -1.0, 0.0, 1.0, 50.0, 99.9, 120.0, 1e6])
def test_the_load_bar_keeps_its_width_and_never_falls_as_the_load_rises(percent: float) -> None:
    drawn = load_bar(percent, 85.0, 110.0)
    assert len(drawn) == BAR_CELLS + 2
    assert drawn.count("#") <= load_bar(percent + 10.0, 85.0, 110.0).count("#")


def test_the_break_band_stands_in_the_bar_until_the_load_covers_it() -> None:
    assert "=" in load_bar(50.0, 85.0, 110.0)
    assert "=" not in load_bar(119.0, 85.0, 110.0)
    assert "=" not in load_bar(50.0, None, None)
    said = expected_text(
        {"expected_percent": 50.0, "expected_n": 400.0, "band_low_n": 340.0, "band_high_n": 440.0}
    )
    assert said.endswith("50 % of 400 N") and "=" in said
    assert expected_text({}) == "-"


def test_a_bar_that_did_not_break_is_given_no_strength() -> None:
    stopped = {"specimen": "A-1", "stress_survived_mpa": 185.04, "verdict": "stopped", "strength_mpa": None}
    assert result_text(stopped) == "A-1: not broken, bore 185.0 MPa   stopped"
    broken = {"specimen": "A-2", "strength_mpa": 384.06, "peak_n": 466.4, "break_class": "sudden break"}
    assert result_text(broken) == "A-2: 384.1 MPa at 466.4 N   sudden break"
    assert result_text({"specimen": "A-3", "problem": "record does not read"}).endswith(
        "record does not read"
    )


def test_a_sealed_record_is_told_with_its_remarks_and_its_place() -> None:
    result = {
        "strength_mpa": 384.06,
        "peak_n": 466.4,
        "break_class": "sudden break",
        "strength_u_k2_mpa": 4.0,
        "remarks": [{"code": "x", "text": "the method wants 30 s"}],
    }
    first, remark, place = sealed_lines({"specimen": "A-2", "result": result, "path": "r/A-2.h5"})
    assert first.endswith("U(k=2) 4.0 MPa")
    assert remark == "  remark: the method wants 30 s" and place == "  record: r/A-2.h5"


def test_refusals_list_every_condition_once() -> None:
    assert refusal_lines("start", ["state is loading", "state is loading"]) == [
        "start refused: state is loading"
    ]
    assert refusal_lines("start", ["a", "b"]) == ["start refused:", "  - a", "  - b"]


def test_recording_is_silent_while_all_is_well_and_names_what_is_not() -> None:
    assert (
        recording_text({"recorder": {"lag_s": 0.1, "trouble": ""}, "archivist": {"report": "status"}}, 0)
        == ""
    )
    assert "12 s behind" in recording_text({"recorder": {"lag_s": 12.0}}, 0)
    assert "disk full" in recording_text({"recorder": {"trouble": "disk full"}}, 0)
    assert "missed 3 entries" in recording_text({}, 3)
    assert "being recovered" in recording_text({"archivist": {"report": "recovering"}}, 0)


@pytest.mark.parametrize("name", sorted(FAULTS))
def test_a_fault_says_what_it_is_what_was_done_and_what_to_do(name: str) -> None:
    reaction = FAULTS[name]
    event = {
        "event": "fault",
        "name": name,
        "what": reaction.what,
        "did": "stopped",
        "do_now": reaction.do_now,
    }
    said = fault_text({**event, "detail": "cable"})
    assert reaction.what in said and "cable" in said and "stopped" in said and said.endswith(reaction.do_now)


def test_reasons_of_a_refused_tare_are_told() -> None:
    event = {"event": "tare_refused", "reasons": ["gross force 267.2 N: load on the fixture"]}
    assert fault_text(event) == "tare refused; gross force 267.2 N: load on the fixture"


def test_what_to_do_depends_on_more_than_the_state() -> None:
    assert "tare" in instruction("at rest", run_open=True, monitor_only=False)
    assert "mount" in instruction("at rest", run_open=False, monitor_only=False)
    assert "every bar" in instruction("at rest", run_open=False, monitor_only=False, all_done=True)
    assert "can NOT stop" in instruction("ready", run_open=True, monitor_only=True)
    for state in INSTRUCTIONS:
        assert instruction(state, run_open=False, monitor_only=False)


def test_a_verdict_by_the_rules_stands_before_the_strength():
    result = {"strength_mpa": 385.0, "verdict": "counted with remark", "verdict_by": "rules of method x"}
    first, second, _ = sealed_lines({"specimen": "A-1", "result": result, "path": "a.h5"})
    assert first == "A-1: counted with remark by the rules" and "385.0 MPa" in second
