"""Shear, roller stress, large deflection, place, gauges, edges, bridges.

Marks: C confirmed on a public page, K computed with an independent general library, M from memory.
"""

import numpy as np
import pytest

from daq.mechanics.bridges import (
    Bridge,
    apparent_quarter_strain,
    lead_wire_factor,
    output_ratio,
    shunt_output_ratio,
    shunt_resistance_ohm,
    shunt_strain,
    strain_from_ratio,
)
from daq.mechanics.contact import (
    four_point_peak_ratio,
    four_point_roller_ratio,
    roller_stress_mpa,
    three_point_ratio,
)
from daq.mechanics.deflection import shear_share_mid, shear_share_plane_stress
from daq.mechanics.edges import chamfer_factor
from daq.mechanics.friction import friction_share_max
from daq.mechanics.gauges import gauge_mean_share, transverse_factor, transverse_strain
from daq.mechanics.large import LargeDeflection, strain_third_point, strain_three_point, stress_factor
from daq.mechanics.sections import Rectangle, Spans, cowper_rectangle
from daq.mechanics.stress import beam_stress_mpa, moment_share

BAR = Rectangle(4.0, 3.0)


@pytest.mark.parametrize("poisson_ratio", [0.0, 0.22, 0.25, 0.3])
def test_shear_term_three_point(poisson_ratio: float):
    """2.4(1+nu)(h/L)^2 with 5/6; (12+11nu)/5 with Cowper's coefficient (K algebra; Cowper's paper C)."""
    spans = Spans(40.0)
    thin = (3.0 / 40.0) ** 2
    energy = shear_share_mid(BAR, spans, poisson_ratio, BAR.shear_coefficient(poisson_ratio))
    cowper = shear_share_mid(BAR, spans, poisson_ratio, cowper_rectangle(poisson_ratio))
    assert energy / thin == pytest.approx(2.4 * (1.0 + poisson_ratio), rel=1e-12)
    assert cowper / thin == pytest.approx((12.0 + 11.0 * poisson_ratio) / 5.0, rel=1e-12)


def test_shear_term_four_point():
    """1 + 2E h^2/(kappa G(3L^2-4a^2)), K algebra."""
    spans, nu, kappa = Spans(40.0, 20.0), 0.25, 5.0 / 6.0
    by_formula = 2.0 * 2.0 * (1.0 + nu) * 3.0**2 / (kappa * (3.0 * 40.0**2 - 4.0 * 10.0**2))
    assert shear_share_mid(BAR, spans, nu, kappa) == pytest.approx(by_formula, rel=1e-12)


@pytest.mark.parametrize("slenderness", [5.0, 10.0, 13.33, 20.0])
def test_shear_term_against_measured_finite_elements(slenderness: float):
    """FE, bottom mid to support point, nu 0.3: 3.836, 3.092, 2.905, 2.719; a physical check allows +-0.35
    (K).

    At L/h = 5 the support rollers' own local effect is larger than that: only the neutral axis (2.598) is
    met.
    """
    neutral_axis = {5.0: 2.598, 10.0: 2.724, 13.33: 2.755, 20.0: 2.785}[slenderness]
    spans = Spans(slenderness * 3.0)
    coefficient = shear_share_mid(BAR, spans, 0.3, 5.0 / 6.0) * slenderness**2
    assert coefficient == pytest.approx(3.12, rel=1e-12)
    assert abs(coefficient - neutral_axis) < (0.35 if slenderness >= 10 else 0.55) + 0.05


@pytest.mark.parametrize(
    ("slenderness", "coefficient"), [(5.0, 2.598), (10.0, 2.724), (13.33, 2.755), (20.0, 2.785)]
)
def test_shear_term_of_plane_elasticity(slenderness: float, coefficient: float):
    """FE, neutral axis, nu 0.3: 2.85 - 1.26 h/L (K); printed 2.85 - 0.84 h/L (M)."""
    leading = shear_share_plane_stress(3.0, 3.0 * slenderness, 0.3) * slenderness**2
    assert leading == pytest.approx(2.85, rel=1e-12)
    assert leading - 1.26 / slenderness == pytest.approx(coefficient, abs=2.5e-3)
    assert abs(leading - 0.84 / slenderness - coefficient) < 0.42 / slenderness + 3e-3


@pytest.mark.parametrize(
    ("slenderness", "point", "narrow", "tenth", "third"),
    [  # exact point load; finite elements at w/h = 0.02, 0.10 and 0.30: K
        (5.0, 0.965149, 0.965121, 0.964541, 0.959781),
        (10.0, 0.982575, 0.982564, 0.982273, 0.979893),
        (40.0 / 3.0, 0.986931, 0.986923, 0.986705, 0.984920),
        (20.0, 0.991287, 0.991282, 0.991137, 0.989947),
    ],
)
def test_wedge_stress_under_the_roller(
    slenderness: float, point: float, narrow: float, tenth: float, third: float
):
    h = 3.0
    assert three_point_ratio(h, slenderness * h) == pytest.approx(point, abs=1e-6)
    assert three_point_ratio(h, slenderness * h, 0.02 * h) == pytest.approx(narrow, abs=1e-4)
    assert three_point_ratio(h, slenderness * h, 0.10 * h) == pytest.approx(tenth, abs=1e-4)
    assert three_point_ratio(h, slenderness * h, 0.30 * h) == pytest.approx(third, abs=1e-4)


def test_four_point_roller_stress():
    """3 x 4 on 40/20: 1.01019 inboard and 0.98693 under a load roller (K); FE 1.01018 and 0.98688."""
    spans = Spans(40.0, 20.0)
    assert four_point_peak_ratio(3.0, spans) == pytest.approx(1.01019, abs=5e-6)
    assert four_point_roller_ratio(3.0, spans) == pytest.approx(0.98693, abs=5e-6)
    nominal = beam_stress_mpa(100.0, BAR, spans)
    extra = roller_stress_mpa(np.array([0.0, 10.0 - 0.375 * 3.0, 10.0]), 100.0, BAR, spans)
    assert 1.0 + extra / nominal == pytest.approx([1.0, 1.01019, 0.98693], abs=1e-5)


def test_three_point_roller_stress_agrees_with_the_ratio():
    spans = Spans(40.0)
    extra = float(roller_stress_mpa(0.0, 100.0, BAR, spans))
    assert 1.0 + extra / beam_stress_mpa(100.0, BAR, spans) == pytest.approx(
        three_point_ratio(3.0, 40.0), abs=1e-6
    )


@pytest.mark.parametrize(
    ("x", "exact", "series"),
    [  # elastica K, series of ISO 14125 M
        (0.02001, 0.119856, 0.119867),
        (0.05016, 0.297756, 0.297912),
        (0.10131, 0.582184, 0.583158),
        (0.13646, 0.758107, 0.759795),
    ],
)
def test_large_deflection_strain_three_point(x: float, exact: float, series: float):
    span_mm, h = 100.0, 2.0
    value = strain_three_point(x * span_mm, span_mm, h) * span_mm / h
    assert value == pytest.approx(series, rel=2e-4)
    assert value == pytest.approx(exact, rel=2.5e-3)


@pytest.mark.parametrize(
    ("x", "exact", "series"), [(0.05521, 0.256733, 0.25707), (0.12920, 0.575925, 0.57719)]
)
def test_large_deflection_strain_third_point(x: float, exact: float, series: float):
    value = strain_third_point(x * 100.0, 100.0, 2.0) * 50.0
    assert value == pytest.approx(series, rel=2e-4)
    assert value == pytest.approx(exact, rel=2.5e-3)


@pytest.mark.parametrize(("x", "exact"), [(0.02001, 1.00240), (0.05016, 1.01516), (0.10131, 1.06267)])
def test_large_deflection_moment(x: float, exact: float):
    """M/M0 of the elastica is 1 + 6(s/L)^2 to 1e-3 at s/L = 0.1 (K): the thin limit of both printed forms."""
    for form in (LargeDeflection.D790_3_POINT, LargeDeflection.ISO_14125_3_POINT):
        assert stress_factor(form, x * 100.0, 100.0, 1e-9) == pytest.approx(exact, abs=1.3e-3)


def test_the_two_standards_differ_and_each_is_named():
    """-4 against -3 in the thickness term (both M)."""
    s, span_mm, h = 8.0, 64.0, 4.0
    thin = (s / span_mm) * (h / span_mm)
    factors = {form: stress_factor(form, s, span_mm, h) for form in LargeDeflection}
    difference = factors[LargeDeflection.ISO_14125_3_POINT] - factors[LargeDeflection.D790_3_POINT]
    assert difference == pytest.approx(thin, rel=1e-12)
    third = factors[LargeDeflection.ISO_14125_4_POINT_THIRD]
    assert third == pytest.approx(1.0 + 8.78 * (s / span_mm) ** 2 - 7.04 * thin, rel=1e-12)
    assert factors[LargeDeflection.D6272_4_POINT_QUARTER] == pytest.approx(1.0 - 10.91 * thin, rel=1e-12)


def test_stress_at_a_place():
    """1 - 2|x|/L in three-point; d/a outside the load span in four-point, K."""
    assert moment_share(np.array([0.0, 5.0, -5.0, 20.0, 30.0]), Spans(40.0)) == pytest.approx(
        [1, 0.75, 0.75, 0, 0]
    )
    assert moment_share(np.array([0.0, 10.0, 15.0, -18.0]), Spans(40.0, 20.0)) == pytest.approx(
        [1, 1, 0.5, 0.2]
    )


@pytest.mark.parametrize(("place_mm", "share"), [(0.0, 0.975), (0.5, 0.96875), (3.0, 0.85)])
def test_gauge_of_finite_length(place_mm: float, share: float):
    """g = 2 mm on L = 40 mm, K (quadrature)."""
    assert gauge_mean_share(2.0, place_mm, Spans(40.0)) == pytest.approx(share, rel=1e-12)


@pytest.mark.parametrize("spans", [Spans(40.0), Spans(40.0, 20.0), Spans(120.0, 40.0)])
def test_gauge_mean_agrees_with_quadrature(spans: Spans):
    """Midpoint rule over 20,000 strips of the moment line."""
    length_mm, place_mm = 6.0, 8.0
    x_mm = place_mm + length_mm * ((np.arange(20_000) + 0.5) / 20_000 - 0.5)
    assert gauge_mean_share(length_mm, place_mm, spans) == pytest.approx(
        moment_share(x_mm, spans).mean(), abs=1e-8
    )


@pytest.mark.parametrize(("chamfer_mm", "factor"), [(0.0, 1.0), (0.12, 1.006871), (0.15, 1.010631)])
def test_chamfer_factor(chamfer_mm: float, factor: float):
    assert chamfer_factor(BAR, chamfer_mm) == pytest.approx(factor, abs=5e-7)  # K; C1161's 1 % at 0.15 mm M


def test_friction_is_one_sided_and_as_the_job_map_says():
    """mu 0.3, h 3: 9 % in four-point with a = 10, 3 % in three-point on 40 (first principles)."""
    assert friction_share_max(BAR, Spans(40.0, 20.0)) == pytest.approx(0.09, rel=1e-12)
    assert friction_share_max(BAR, Spans(40.0)) == pytest.approx(0.03, rel=1e-12)


@pytest.mark.parametrize(
    ("bridge", "strain", "poisson_ratio", "ratio"),
    [  # GF = 2, circuit solved: K
        (Bridge.QUARTER, 1000e-6, 0.0, 4.99500500e-4),
        (Bridge.QUARTER, -1000e-6, 0.0, -5.00500501e-4),
        (Bridge.QUARTER, 3000e-6, 0.0, 1.495513e-3),
        (Bridge.HALF_BENDING, 1000e-6, 0.0, 1.0e-3),
        (Bridge.HALF_POISSON, 1000e-6, 0.22, 6.09525e-4),
        (Bridge.FULL_BENDING, 1000e-6, 0.0, 2.0e-3),
        (Bridge.FULL_BENDING_POISSON, 1000e-6, 0.22, 1.22e-3),
        (Bridge.FULL_AXIAL_POISSON, 1000e-6, 0.22, 1.219049e-3),
    ],
)
def test_bridge_output_and_its_inverse(bridge: Bridge, strain: float, poisson_ratio: float, ratio: float):
    value = output_ratio(bridge, strain, 2.0, poisson_ratio)
    assert value == pytest.approx(ratio, rel=1e-6)
    assert strain_from_ratio(bridge, value, 2.0, poisson_ratio) == pytest.approx(strain, rel=1e-12)


def test_bending_bridges_cancel_axial_strain_to_first_order():
    """The circuit with resistors: two arms that bend against each other and stretch together (K: 2nd order only)."""
    bend, stretch = 2.0 * 1000e-6, 2.0 * 200e-6
    half = (1.0 + bend + stretch) / (2.0 + 2.0 * stretch) - 0.5
    alone = output_ratio(Bridge.HALF_BENDING, 1000e-6, 2.0)
    assert half / alone == pytest.approx(1.0 / (1.0 + stretch), rel=1e-12)
    assert abs(half / alone - 1.0) < 1.01 * stretch
    only_stretch = (1.0 + stretch) / (2.0 + 2.0 * stretch) - 0.5
    assert abs(only_stretch) < 1e-16


def test_apparent_strain_of_a_quarter_bridge():
    for strain, apparent in ((1000e-6, 999.0010e-6), (3000e-6, 2991.0269e-6)):
        assert apparent_quarter_strain(output_ratio(Bridge.QUARTER, strain, 2.0), 2.0) == pytest.approx(
            apparent, rel=1e-7
        )


@pytest.mark.parametrize(
    ("gauge_ohm", "shunt_ohm"), [(120.0, 59880.0), (350.0, 174650.0), (1000.0, 499000.0)]
)
def test_shunt_resistor_for_a_thousand_microstrain(gauge_ohm: float, shunt_ohm: float):
    """C (trade note) and K; shunt and gauge nonlinearity are the same."""
    assert shunt_resistance_ohm(gauge_ohm, 2.0, 1000e-6) == pytest.approx(shunt_ohm, rel=1e-12)
    assert shunt_strain(gauge_ohm, shunt_ohm, 2.0) == pytest.approx(1000e-6, rel=1e-12)
    assert shunt_output_ratio(gauge_ohm, shunt_ohm) == pytest.approx(
        output_ratio(Bridge.QUARTER, -1000e-6, 2.0), rel=1e-12
    )


def test_shunt_of_a_hundred_kilohm():
    assert shunt_strain(350.0, 100e3, 2.0) == pytest.approx(1743.8964e-6, rel=1e-7)  # K


def test_transverse_sensitivity_and_lead_wires():
    """nu0 0.285, Kt +1 %, nu 0.22 -> 0.9993486; two gauges (1000, -220) -> 999.4437; leads 0.997151 (K)."""
    assert transverse_factor(0.01, 0.22) == pytest.approx(0.9993486, abs=5e-8)
    assert transverse_strain(1000.0, -220.0, 0.01) == pytest.approx(999.4437, abs=5e-4)
    assert lead_wire_factor(350.0, 1.0) == pytest.approx(0.997151, abs=5e-7)
