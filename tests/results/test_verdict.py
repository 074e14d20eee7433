"""Verdicts: the heaviest finding decides, a strength is never looked at, and place rules follow the statics."""

from __future__ import annotations

import dataclasses

import pytest

from daq.cards.library import find_method
from daq.mechanics.breakplace import break_place, from_mid_of_left_mm, local_stress_mpa
from daq.mechanics.sections import Rectangle, Spans
from daq.mechanics.stress import beam_stress_mpa, offcentre_stress_mpa
from daq.results.rules import Consequence, Counting, PlaceRule, Region, Remark, Rules, rules_of
from daq.results.secondlook import explanations, off_by
from daq.results.verdict import Evidence, judge

CONCRETE = Spans(300.0, 100.0)
FIVE_PERCENT = PlaceRule(
    region=Region.LOAD_SPAN, near_share=0.05, near=Consequence.REMARK, near_local=True,
    beyond=Consequence.NOT_COUNTED, needed=True,
)  # fmt: skip


def evidence(**changes) -> Evidence:
    clean = Evidence(True, False, "", "sudden break", (), (), has_strength=True, spans=CONCRETE)
    return dataclasses.replace(clean, **changes)


def test_no_field_of_the_evidence_is_a_load_or_a_stress() -> None:
    names = [field.name for field in dataclasses.fields(Evidence)]
    assert (
        not [name for name in names if name.endswith(("_n", "_mpa", "strength"))]
        or names.count("has_strength") == 1
    )
    assert {field.type for field in dataclasses.fields(Evidence) if field.name == "has_strength"} == {"bool"}


@pytest.mark.parametrize(
    ("changes", "counting", "word"),
    [
        ({}, Counting.COUNTED, ""),
        ({"remarks": (Remark("pop-in", "1 pop-in"),)}, Counting.WITH_REMARK, "pop-in"),
        ({"remarks": (Remark("fixed rollers", "x"),)}, Counting.COUNTED, ""),
        ({"interrupted": True, "reason": "stop"}, Counting.INTERRUPTED, "stop"),
        ({"broken": False, "has_strength": False, "break_class": "unclear"}, Counting.NOT_COUNTED, "unclear"),
        ({"has_strength": False, "missing": ("no width of the bar",)}, Counting.PROVISIONAL, "no width"),
        ({"missing": ("no frame card",)}, Counting.WITH_REMARK, "no frame card"),
        ({"stiffness_ratio": 8.0, "explained": "span twice"}, Counting.PROVISIONAL, "span twice"),
    ],
)
def test_the_heaviest_finding_decides(changes, counting, word) -> None:
    verdict = judge(evidence(**changes), Rules())
    assert verdict.counting is counting and word in verdict.reason


def test_a_method_may_make_any_remark_heavier() -> None:
    rules = Rules(consequences={"pop-in": Consequence.NOT_COUNTED}, source="card")
    verdict = judge(evidence(remarks=(Remark("pop-in", "1 pop-in"), Remark("slips", "4 slips"))), rules)
    assert verdict.counting is Counting.NOT_COUNTED and verdict.reason == "1 pop-in"
    assert [finding.code for finding in verdict.findings] == ["pop-in", "slips"]


@pytest.mark.parametrize(
    ("at_mm", "counting"),
    [
        (None, Counting.PROVISIONAL),
        (0.0, Counting.COUNTED),
        (-50.0, Counting.COUNTED),  # under the roller
        (62.0, Counting.WITH_REMARK),  # 12 mm outside: 4 % of the span
        (-65.0, Counting.WITH_REMARK),  # 5 % exactly
        (70.0, Counting.NOT_COUNTED),  # 20 mm: 6.7 %
    ],
)
def test_scenario_6_concrete_positions(at_mm, counting) -> None:
    """Acceptance scenario 6: inside; 4 % of the span outside the middle third; 6.7 %: not counted."""
    assert judge(evidence(from_mid_mm=at_mm), Rules(place=FIVE_PERCENT)).counting is counting


def test_scenario_6_strength_at_the_breaks_own_place() -> None:
    """15.0 kN, 100x100, span 300 third-point, a = 88 mm: 3.96 against 4.50 MPa; equal to 3Fa/(bd^2)."""
    beam = Rectangle(100.0, 100.0)
    nominal = beam_stress_mpa(15_000.0, beam, CONCRETE)
    place = break_place(62.0, CONCRETE)
    assert nominal == pytest.approx(4.5) and place.support_distance_mm == 88.0
    assert nominal * place.share == pytest.approx(3.96, rel=1e-12)
    assert nominal * place.share == pytest.approx(offcentre_stress_mpa(15_000.0, 88.0, beam), rel=1e-12)


@pytest.mark.parametrize(
    ("region", "spans", "roller_mm", "half_mm"),
    [
        (Region.MIDDLE_THIRD, Spans(64.0), 10.0, 64.0 / 6.0),
        (Region.ROLLER_WIDTH, Spans(280.0), 20.0, 10.0),
        (Region.LOAD_SPAN, Spans(40.0, 20.0), 4.5, 10.0),
    ],
)
def test_regions(region, spans, roller_mm, half_mm) -> None:
    rules = Rules(place=PlaceRule(region=region, beyond=Consequence.NOT_COUNTED))
    for at_mm, counting in ((half_mm, Counting.COUNTED), (-half_mm - 0.01, Counting.NOT_COUNTED)):
        found = judge(evidence(from_mid_mm=at_mm, spans=spans, roller_diameter_mm=roller_mm), rules)
        assert found.counting is counting


def test_place_and_local_stress_by_statics() -> None:
    spans = Spans(40.0, 20.0)
    outside = break_place(-15.0, spans)
    assert (outside.outside_mm, outside.outside_share, outside.share, outside.inside) == (
        5.0,
        0.125,
        0.5,
        False,
    )
    assert local_stress_mpa(400.0, outside, 3.0, 0.75) == pytest.approx(400.0 * 0.5 * 0.5)
    assert local_stress_mpa(400.0, break_place(0.0, spans), 3.0, 1.5) == 0.0
    assert from_mid_of_left_mm(20.0, 45.0) == -2.5
    for bad in (20.1, -20.1, float("nan")):
        with pytest.raises(ValueError, match="supports"):
            break_place(bad, spans)
    with pytest.raises(ValueError, match="length"):
        from_mid_of_left_mm(46.0, 45.0)


def test_second_look_ranks_the_slips_of_scenario_7() -> None:
    """Card says 80/40 for a bar on 40/20: E x8; b and h swapped on the card of a 4 x 3 bar: x0.56."""
    assert explanations(8.0, Rectangle(4.0, 3.0), Spans(80.0, 40.0))[0].text.startswith("support span")
    assert explanations(0.5625, Rectangle(3.0, 4.0), Spans(40.0, 20.0))[0].text == "width and height swapped"
    assert explanations(0.5, Rectangle(4.0, 3.0), Spans(40.0, 20.0))[0].text.startswith("three-point")
    assert explanations(1.107, Rectangle(4.0, 3.0), Spans(40.0, 20.0))[0].text == "height about 5 % too small"
    assert explanations(50.0, None, None) == ()


def test_second_look_against_the_series() -> None:
    others = [380.0, 382.0, 379.0, 381.0]
    assert off_by(3040.0, others) == pytest.approx(8.0, rel=0.01)
    assert off_by(400.0, others) is None and off_by(3040.0, others[:2]) is None
    assert (
        off_by(460.0, [300.0, 340.0, 380.0, 420.0, 460.0]) is None
    )  # within 4 robust sigma of a wide series


def test_the_rules_come_from_the_card() -> None:
    """The shipped card of ASTM C78 states the 5 % rule (confirmed from a public excerpt), that of tiles the edge."""
    concrete = rules_of(find_method("C78").card)
    assert concrete.place == FIVE_PERCENT and "C78" in concrete.source
    assert rules_of(find_method("ISO-10545-4").card).edge_thickness
    assert rules_of(None) == Rules()
