"""Standing on made-up runs: tiles take the thickness at the broken edge, concrete the stress at the break."""

from __future__ import annotations

import numpy as np
import pytest

from daq.cards.library import find_method
from daq.cards.notes import read_note
from daq.results.reduce import reduce
from daq.results.rules import Counting
from daq.results.standing import standing_of

HEAD = {"name": "Q. Tester", "utc": "2031-05-06T07:08:09Z"}


def broken(made, method: str, **changes):
    """A run of the quarter-point fixture under the rules of a shipped card."""
    rules = find_method(method).card
    asked = {
        key: getattr(rules, key).model_dump(mode="json") for key in ("validity", "measuring", "strength")
    }
    asked["validity"] |= {"span_per_thickness": None, "force_range_percent": None}
    bar = made.Bar(method_changes=asked | {"readings": 3}, **changes)
    run = made.made_run(bar, np.random.default_rng(1))
    return run, reduce(run).as_json()


def test_scenario_14_tile_two_breaks_and_the_broken_edge(made) -> None:
    """Strength from the first break, "two breaks" said, thickness at the broken edge asked, old value kept."""
    second = ({"at_s": 16.4, "event": "second_break", "load_n": 300.0},)
    run, sealed = broken(made, "ISO-10545-4", extra_events=second)
    assert (
        sealed["verdict"] == "provisional" and "thickness along the broken edge" in sealed["verdict_reason"]
    )
    assert "two breaks" in {remark["code"] for remark in sealed["remarks"]}
    assert sealed["peak_n"] == pytest.approx(460.0, rel=1e-3)
    said = {"break_note": {"from_mid_mm": (1.0,), "edge_thickness_mm": (3.02, 2.95, 2.98)}}
    found = standing_of(run.cards, sealed, [read_note(HEAD | said)], lambda: run)
    assert found.verdict.counting is Counting.WITH_REMARK
    assert found.strength_mpa == pytest.approx(sealed["strength_mpa"] * (3.0 / 2.95) ** 2, rel=1e-9)
    assert found.as_json()["as_sealed"]["strength_mpa"] == sealed["strength_mpa"]
    (change,) = found.changes
    assert (change.what, change.new) == ("thickness_mm", [2.95])
    far = {"break_note": {"from_mid_mm": (8.0,), "edge_thickness_mm": (3.0,)}}
    outside = standing_of(run.cards, sealed, [read_note(HEAD | far)], lambda: run)
    assert outside.verdict.counting is Counting.NOT_COUNTED and not outside.counts


@pytest.mark.parametrize(
    ("at_mm", "share", "counting"),
    [(5.0, 1.0, Counting.COUNTED), (11.5, 0.85, Counting.WITH_REMARK), (12.5, 0.75, Counting.NOT_COUNTED)],
)
def test_scenario_6_rule_of_the_card_on_a_run(made, at_mm: float, share: float, counting: Counting) -> None:
    """C78's 5 % of the span on a 40/20 fixture: 2 mm outside the rollers; the near break's strength is its own."""
    run, sealed = broken(made, "C78")
    assert sealed["verdict"] == "provisional" and "position not entered" in sealed["verdict_reason"]
    note = read_note(HEAD | {"break_note": {"from_mid_mm": (at_mm,)}})
    found = standing_of(run.cards, sealed, [note], lambda: run)
    assert found.verdict.counting is counting
    assert found.strength_mpa == pytest.approx(sealed["strength_mpa"] * share, rel=1e-12)
    assert found.result["strength_mpa"] == sealed["strength_mpa"]  # nominal stays nominal


def test_without_notes_a_record_stands_as_sealed(made) -> None:
    run = made.made_run(made.Bar(), np.random.default_rng(1))
    sealed = reduce(run).as_json()
    found = standing_of(run.cards, sealed)
    assert found.as_json()["as_sealed"] == {} and found.strength_mpa == sealed["strength_mpa"]
    assert found.verdict.counting.value == sealed["verdict"] and found.changes == ()


def test_a_record_without_a_result_is_provisional_and_says_why(made) -> None:
    cards = made.made_cards(made.Bar())
    found = standing_of(cards, {"failure": "ValueError: none"})
    assert found.strength_mpa is None and not found.counts
    assert found.verdict.counting in (Counting.NOT_COUNTED, Counting.PROVISIONAL)


def test_stiffness_off_the_series_stays_provisional_until_a_person_says_otherwise(made) -> None:
    """The result cannot count without a correction, or a word with a name."""
    run = made.made_run(made.Bar(), np.random.default_rng(1))
    sealed = reduce(run).as_json()
    found = standing_of(run.cards, sealed, series_ratio=8.0)
    assert found.verdict.counting is Counting.PROVISIONAL and "span" in found.verdict.reason
    said = {
        "reason": "span measured again: right",
        "verdict": {"old": "provisional", "new": "counted with remark"},
    }
    assert standing_of(run.cards, sealed, [read_note(HEAD | said)], series_ratio=8.0).verdict.counting is (
        Counting.WITH_REMARK
    )
