"""What the plan says of the acceptance scenarios, by number."""

from __future__ import annotations

import dataclasses

import pytest

from daq.cards.change import changed_method
from daq.cards.library import find_method
from daq.cards.load import example_path, load_frame, load_method
from daq.mechanics.stress import beam_stress_mpa, offcentre_stress_mpa
from daq.series.gates import Finding, Gate, findings, refusal
from daq.series.plan import Bench, bench_of, lag_of, make_plan
from daq.series.suggest import suggest

KILO = Bench(
    stiffness_n_mm=10e3, stiffness_measured=True, capacity_n=1000.0, verified_n=(10.0, 1000.0), rate_hz=1000.0,
    time_constant_s=0.0, lag_source="declared", noise_n=0.15,
)  # fmt: skip


def one(found: tuple[Finding, ...], name: str, word: str = "") -> Finding:
    (finding,) = [finding for finding in found if finding.name == name and word in finding.text]
    return finding


def test_1_clean_alumina_series():
    """About 460 N, 23.6 +- 0.5 MPa/s, about 16 s; chamfer factor 1.0069; no caution."""
    frame = load_frame(example_path("kiln-lane-a.toml"))
    plan = make_plan(load_method(example_path("alumina-bars.toml")), *bench_of(frame, "quarter-40-20"))
    assert plan.mean.load_n == pytest.approx(460.0, abs=1.0)
    assert plan.stress_rate_mpa_s == pytest.approx(23.6, abs=0.5)
    assert plan.mean.time_s == pytest.approx(16.0, abs=0.5)
    assert plan.corrections.chamfer == pytest.approx(1.0069, abs=5e-5)
    assert {finding.gate for finding in findings(plan, 30)} == {Gate.OPEN}
    run_on_um = plan.speed_mm_min / 60.0 * 0.15 * 1e3
    assert run_on_um < 3.0


def test_2_glass_fast_rate_slow_amplifier():
    """90 MPa (108 N) at 90 MPa/s, 2 Hz filter: refused, because the lag is 8 % of the second to break."""
    glass = load_method(example_path("glass-bars.toml"))
    method = changed_method(glass, {"rate.rate_mpa_s": 90.0})
    lag_s, source = lag_of(None, 2.0)
    plan = make_plan(method, dataclasses.replace(KILO, time_constant_s=lag_s, lag_source=source))
    assert plan.mean.load_n == pytest.approx(108.0, abs=0.1)
    assert plan.mean.time_s == pytest.approx(1.0, rel=1e-9)
    sampling = one(findings(plan), "sampling")
    assert sampling.gate is Gate.BLOCKED and " 8 % of 1 s" in sampling.text and "79.6 ms" in sampling.text
    assert suggest(plan).sample_rate_hz is None
    unknown = make_plan(method, dataclasses.replace(KILO, time_constant_s=None))
    said = one(findings(unknown), "sampling")
    assert said.gate is Gate.CAUTION and "lag not known" in said.text


def test_3_wrong_cell_for_dental_bars():
    """104 N, 6.8 s, 55.6 MPa/s; a 5 kN cell verified from 100 N: 36 +- 1 % below the verified range; 200 N passes."""
    dental = load_method(example_path("dental-bars.toml"))
    large = dataclasses.replace(KILO, capacity_n=5000.0, verified_n=(100.0, 5000.0), noise_n=0.5)
    plan = make_plan(dental, large)
    assert plan.mean.load_n == pytest.approx(104.0, abs=0.5)
    assert plan.mean.time_s == pytest.approx(6.8, abs=0.05)
    assert plan.stress_rate_mpa_s == pytest.approx(55.6, abs=0.1)
    assert 100.0 * plan.share_below(100.0) == pytest.approx(36.0, abs=1.0)
    below = one(findings(plan), "capacity", "below the lowest verified")
    assert below.gate is Gate.BLOCKED and below.text.startswith("35.9 % of the bars")
    small = dataclasses.replace(KILO, capacity_n=200.0, verified_n=(2.0, 200.0))
    passed = [finding for finding in findings(make_plan(dental, small)) if finding.name == "capacity"]
    assert {finding.gate for finding in passed} == {Gate.OPEN}
    assert suggest(plan).cell_n == 200.0


def test_4_mortar_prisms_and_hum():
    """7 MPa -> 2987 N, 60 s at 50 N/s; 50 Hz at 80 S/s shows as 30; the bar bends 9.7 of 159 um."""
    bench = dataclasses.replace(
        KILO, stiffness_n_mm=20e3, capacity_n=10e3, verified_n=(100.0, 10e3), rate_hz=80.0, noise_n=0.4
    )
    plan = make_plan(find_method("EN-196-1").card, bench)
    assert plan.mean.load_n == pytest.approx(2987.0, abs=1.0)
    assert plan.mean.time_s == pytest.approx(60.0, abs=0.5)
    assert (plan.mean.bar_um, plan.mean.travel_um) == (
        pytest.approx(9.7, abs=0.05),
        pytest.approx(159.0, abs=0.3),
    )
    found = findings(plan, 3)
    assert "50 Hz shows as 30 Hz" in one(found, "hum").text
    assert "no modulus from the crosshead" in one(found, "modulus").text
    assert not [finding for finding in found if finding.gate is Gate.BLOCKED]


def test_6_concrete_beam():
    """100 x 100 on 300 at 0.05 MPa/s: 15.0 kN at 90 s on a 50 kN cell; the card's rule: 3.96 against 4.50 MPa."""
    changes = {"support_span_mm": 300.0, "width_mm": 100.0, "thickness_mm": 100.0, "rate.rate_mpa_s": 0.05}
    assert "span over thickness is 3" in str(
        refusal(make_plan(changed_method(find_method("C78").card, changes)))
    )
    card = find_method("C78").card
    sized = card.model_copy(
        update={
            "support_span_mm": 300.0, "load_span_mm": 100.0, "width_mm": 100.0, "thickness_mm": 100.0,
            "rate": card.rate.model_copy(update={"rate_mpa_s": 0.05}),
        }
    )  # fmt: skip
    plan = make_plan(sized, dataclasses.replace(KILO, capacity_n=50e3, verified_n=(500.0, 50e3)))
    assert plan.mean.load_n == pytest.approx(15.0e3, rel=1e-9)
    assert plan.mean.time_s == pytest.approx(90.0, rel=1e-9)
    assert {finding.gate for finding in findings(plan) if finding.name == "capacity"} == {Gate.OPEN}
    place = card.validity.break_place
    assert beam_stress_mpa(15e3, plan.section, plan.spans) == pytest.approx(4.50, rel=1e-12)
    assert offcentre_stress_mpa(15e3, 88.0, plan.section) == pytest.approx(3.96, rel=1e-12)
    assert 12.0 / 300.0 <= place.near_percent / 100.0 < 20.0 / 300.0
    assert (place.near_stress, place.beyond) == ("at the break", "not counted")


def test_14_tile_on_rubber():
    """300 x 300 x 9 on 280: 2604 N; the breaking strength is a force below 3000 N, so a stress is reported."""
    tile = find_method("ISO-10545-4").card
    plan = make_plan(tile, dataclasses.replace(KILO, capacity_n=5000.0, verified_n=(50.0, 5000.0)))
    assert plan.mean.load_n == pytest.approx(2604.0, abs=0.5)
    assert plan.breaking_strength_n == pytest.approx(2604.0 * 280.0 / 300.0, abs=0.5)
    scope = one(findings(plan), "scope")
    assert scope.gate is Gate.OPEN and "3000 N" in scope.text
    assert tile.measuring.thickness_at == "broken edge" and tile.needs.pads == "rubber"
    hard = make_plan(changed_method(tile, {"expected.strength_mpa": 55.0}))
    assert one(findings(hard), "scope").gate is Gate.CAUTION
