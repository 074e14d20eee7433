"""Gauges on a bar: leads, shunt check, alignment from several gauges, and gauge stress beside the beam formula."""

from __future__ import annotations

import numpy as np
import pytest

from daq.mechanics.alignment import Gauge, align, uneven_ends
from daq.mechanics.bridges import (
    Bridge,
    lead_wire_factor,
    output_ratio,
    shunt_gain,
    shunt_output_ratio,
    strain_from_ratio,
    two_wire_factor,
    two_wire_offset,
)
from daq.mechanics.comparison import compare, hooke_plane_stress_mpa, hooke_stress_mpa
from daq.mechanics.contact import roller_stress_mpa
from daq.mechanics.gauges import gauge_mean_share, gauge_roller_share
from daq.mechanics.sections import Circle, Rectangle, Spans
from daq.mechanics.stress import beam_stress_mpa

BAR = Rectangle(4.0, 3.0)
QUARTER, THREE = Spans(40.0, 20.0), Spans(40.0)


# --- bridges: the circuit itself, solved with resistors ---


def quarter_output(arm_ohm: float, others_ohm: float) -> float:
    """Vo/Vex of a Wheatstone bridge with one arm different: two voltage dividers."""
    return arm_ohm / (arm_ohm + others_ohm) - 0.5


def test_two_wire_leads_against_the_circuit():
    """350 ohm, 1 ohm a lead, GF 2: the strain of 1000 ue through the circuit, zero offset taken off."""
    rg, rl, gf, strain = 350.0, 1.0, 2.0, 1000e-6
    rest = quarter_output(rg + 2.0 * rl, rg)
    loaded = quarter_output(rg * (1.0 + gf * strain) + 2.0 * rl, rg)
    seen = strain_from_ratio(Bridge.QUARTER, loaded, gf) - strain_from_ratio(Bridge.QUARTER, rest, gf)
    assert strain_from_ratio(Bridge.QUARTER, rest, gf) == pytest.approx(
        two_wire_offset(rg, rl, gf), rel=1e-12
    )
    # Off the null the bridge is less sensitive by the factor itself: the ratio of resistances, exactly.
    assert seen / strain == pytest.approx(1.0, rel=1e-9)
    relative = (rg * (1.0 + gf * strain) + 2.0 * rl) / (rg + 2.0 * rl) - 1.0
    assert relative / (gf * strain) == pytest.approx(two_wire_factor(rg, rl), rel=1e-9)


def test_three_wire_leads_against_the_circuit():
    """One lead in the gauge's arm, one in the arm beside it: balanced at rest, Rg/(Rg+RL) of the strain."""
    rg, rl, gf, strain = 350.0, 1.0, 2.0, 1000e-6
    assert quarter_output(rg + rl, rg + rl) == 0.0
    loaded = quarter_output(rg * (1.0 + gf * strain) + rl, rg + rl)
    seen = strain_from_ratio(Bridge.QUARTER, loaded, gf)
    assert seen / strain == pytest.approx(lead_wire_factor(rg, rl), rel=1e-9)


def test_shunt_check_tells_the_gain_of_the_chain():
    """An amplifier that shows 2 % too much shows it at the shunt."""
    wanted = shunt_output_ratio(350.0, 174650.0)
    assert shunt_gain(1.02 * wanted, 350.0, 174650.0) == pytest.approx(1.02, rel=1e-12)
    assert wanted == pytest.approx(output_ratio(Bridge.QUARTER, -1000e-6, 2.0), rel=1e-12)


# --- alignment ---

NU = 0.22
TWO = (Gauge(1.0), Gauge(-1.0))
EDGES = (Gauge(1.0, -0.8), Gauge(1.0, 0.8))
SIX = (
    Gauge(1.0), Gauge(1.0, -0.8), Gauge(1.0, 0.8), Gauge(-1.0, 0.3), Gauge(1.0, 0.0, 45.0), Gauge(1.0, 0.0, -45.0),
)  # fmt: skip


def strains_of(gauges, axial=0.0, bending=0.0, sideways=0.0, twist=0.0) -> list[float]:
    """Strain transformation written out with Mohr's circle: mean, half difference and shear at twice the angle."""
    out = []
    for gauge in gauges:
        along = axial + bending * gauge.height + sideways * gauge.side
        across = -NU * along
        shear = twist * gauge.height
        double = np.radians(2.0 * gauge.angle_deg)
        out.append((along + across) / 2 + (along - across) / 2 * np.cos(double) + shear / 2 * np.sin(double))
    return out


def test_two_gauges_tell_bending_and_axial_strain_only():
    found = align(TWO, strains_of(TWO, axial=20e-6, bending=1000e-6), NU)
    assert found.bending == pytest.approx(1000e-6, rel=1e-12) and found.axial == pytest.approx(
        20e-6, rel=1e-9
    )
    assert found.sideways is None and found.twist is None and found.sideways_share is None
    assert found.axial_share == pytest.approx(0.02, rel=1e-9)


def test_two_gauges_at_the_edges_tell_sideways_bending_but_not_the_rest():
    """Both lie on one face: axial strain and main bending look the same to them."""
    found = align(EDGES, strains_of(EDGES, bending=1000e-6, sideways=50e-6), NU)
    assert found.sideways == pytest.approx(50e-6, rel=1e-9)
    assert found.bending is None and found.axial is None and found.twist is None


def test_six_gauges_tell_everything():
    """Truth by Mohr's circle, found by least squares."""
    truth = {"axial": -15e-6, "bending": 1200e-6, "sideways": 60e-6, "twist": 84e-6}
    found = align(SIX, strains_of(SIX, **truth), NU)
    assert (found.axial, found.bending) == (pytest.approx(-15e-6, rel=1e-9), pytest.approx(1200e-6, rel=1e-9))
    assert found.sideways_share == pytest.approx(0.05, rel=1e-9)
    assert found.twist_share == pytest.approx(0.07, rel=1e-9)
    assert found.residual < 1e-15


def test_a_gauge_that_disagrees_shows_in_the_residual():
    strains = strains_of(SIX, bending=1000e-6)
    strains[0] += 30e-6
    assert align(SIX, strains, NU).residual > 5e-6


def test_one_gauge_tells_nothing_apart():
    found = align([Gauge(1.0)], [1000e-6], NU)
    assert (found.axial, found.bending, found.sideways, found.twist) == (None, None, None, None)


@pytest.mark.parametrize(
    ("gauges", "strains", "told"),
    [
        ((), (), "0 strains for 0 gauges"),
        (TWO, (1e-3,), "1 strains for 2 gauges"),
        (TWO, (1e-3, float("nan")), "not a finite number"),
    ],
)
def test_bad_strains_are_refused(gauges, strains, told):
    with pytest.raises(ValueError, match=told):
        align(gauges, strains, NU)


def test_uneven_ends_of_an_offset_load_roller():
    """Statics: rollers 0.1 mm off the middle of 40/20 tilt the moment by 2 e x/(arm span) = 0.25 % at 5 mm."""
    span, half_load, e = 40.0, 10.0, 0.1
    right_support = ((span / 2 + e - half_load) + (span / 2 + e + half_load)) / (2 * span)

    def moment(x: float) -> float:
        left_support = 1.0 - right_support
        return (
            left_support * (span / 2 + x)
            - 0.5 * max(x - (e - half_load), 0.0)
            - 0.5 * max(x - (e + half_load), 0.0)
        )

    assert uneven_ends(moment(-5.0), moment(5.0)) == pytest.approx(-0.0025, rel=1e-3)
    assert uneven_ends(1.0, 1.0) == 0.0


# --- gauge stress and beam formula ---


def test_hooke():
    """Uniaxial and plane stress agree where the bar is free to contract; free of contraction: E/(1-nu^2)."""
    assert hooke_stress_mpa(1000e-6, 380e3) == pytest.approx(380.0, rel=1e-12)
    assert hooke_plane_stress_mpa(1000e-6, -220e-6, 380e3, 0.22) == pytest.approx(380.0, rel=1e-12)
    assert hooke_plane_stress_mpa(1000e-6, 0.0, 70e3, 0.22) == pytest.approx(70.0 / (1 - 0.22**2), rel=1e-12)


def test_a_gauge_in_the_middle_of_four_point_sees_the_nominal_stress():
    """2 mm in the middle of 40/20: 1.000000 in the plane-stress model."""
    nominal = beam_stress_mpa(300.0, BAR, QUARTER)
    found = compare(nominal, 300.0, BAR, QUARTER, from_mid_mm=0.0, gauge_length_mm=2.0)
    assert found.expected_mpa == pytest.approx(nominal, rel=1e-5)
    assert abs(found.difference) < 1e-12 and abs(found.remainder) < 1e-5


def test_three_point_gauge_is_explained_by_gradient_and_roller():
    """g = 2 mm at mid-span of 40 mm: gradient 0.975 (K); the roller takes more; what is left is the modulus."""
    nominal = beam_stress_mpa(100.0, BAR, THREE)
    found = compare(0.95 * nominal, 100.0, BAR, THREE, from_mid_mm=0.0, gauge_length_mm=2.0)
    factors = {reason.name: reason.factor for reason in found.reasons}
    assert factors["moment gradient along the gauge"] == pytest.approx(0.975, rel=1e-12)
    assert 0.985 < factors["load rollers' own stress"] < 1.01
    assert found.remainder == pytest.approx(
        0.95 / (0.975 * factors["load rollers' own stress"]) - 1.0, rel=1e-12
    )


def test_place_chamfer_and_friction_are_told_apart():
    """3 mm off the middle in three-point: 0.85 (K); chamfer 0.12 mm: 1.006871 (K); fixed rollers: down to 3 %."""
    nominal = beam_stress_mpa(100.0, BAR, THREE)
    found = compare(
        0.84 * nominal, 100.0, BAR, THREE,
        from_mid_mm=3.0, gauge_length_mm=2.0, chamfer_mm=0.12, rollers_free=False,
    )  # fmt: skip
    factors = {reason.name: reason.factor for reason in found.reasons}
    assert factors["place along the bar"] == pytest.approx(0.85, rel=1e-12)
    assert factors["chamfered edges"] == pytest.approx(1.006871, abs=1e-6)
    assert found.friction_share == pytest.approx(0.03, rel=1e-12)
    low = compare(0.98 * found.expected_mpa, 100.0, BAR, THREE, from_mid_mm=3.0, gauge_length_mm=2.0, chamfer_mm=0.12,
                  rollers_free=False)  # fmt: skip
    assert low.explained_by_friction
    free = compare(
        0.98 * found.expected_mpa, 100.0, BAR, THREE, from_mid_mm=3.0, gauge_length_mm=2.0, chamfer_mm=0.12
    )
    assert not free.explained_by_friction


def test_a_rod_has_no_roller_field_and_no_chamfer():
    rod = Circle(3.0)
    nominal = beam_stress_mpa(100.0, rod, THREE)
    found = compare(nominal, 100.0, rod, THREE, from_mid_mm=3.0, gauge_length_mm=2.0)
    assert [reason.name for reason in found.reasons] == ["place along the bar"]


@pytest.mark.parametrize("spans", [THREE, QUARTER])
@pytest.mark.parametrize("place_mm", [0.0, 4.0, 9.0, 10.0])
def test_roller_share_of_a_short_gauge_is_that_of_its_middle(spans: Spans, place_mm: float):
    """Right below a roller the local stress has a kink (it takes the beam's kink away): there to 2e-5."""
    point = float(roller_stress_mpa(place_mm, 1.0, BAR, spans)) / beam_stress_mpa(1.0, BAR, spans)
    assert gauge_roller_share(1e-3, place_mm, BAR, spans) == pytest.approx(point, abs=2e-5)
    assert gauge_mean_share(0.01, 15.0, spans) == pytest.approx(gauge_mean_share(2.0, 15.0, spans), rel=1e-9)
