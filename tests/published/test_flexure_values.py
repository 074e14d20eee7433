"""Flexure formulae against values from outside, exact rationals.

Marks: C confirmed on a public page, K computed with an independent general library, M from memory.
"""

import pytest

from daq.mechanics.deflection import (
    load_point_deflection_mm,
    load_point_stiffness_n_mm,
    mid_deflection_mm,
    mid_stiffness_n_mm,
    modulus_from_load_point_slope_mpa,
    modulus_from_mid_slope_mpa,
    strain_factor_load_point,
    strain_factor_mid,
    strain_from_curvature,
    strain_from_load_point,
    strain_from_mid,
)
from daq.mechanics.rates import (
    apparent_modulus_share,
    force_rate_for_stress_rate_n_s,
    force_rate_n_s,
    speed_for_strain_rate_mm_min,
    strain_rate_per_s,
    stress_rate_mpa_s,
)
from daq.mechanics.sections import Circle, Rectangle, Section, Spans, Tube
from daq.mechanics.stress import (
    beam_stress_mpa,
    breaking_strength_n,
    dead_weight_stress_mpa,
    force_for_stress_n,
    glass_plate_stress_mpa,
    offcentre_stress_mpa,
)
from daq.mechanics.units import MPA_PER_PSI, N_PER_KGF, N_PER_LBF

EXACT = 1e-12
BAR = Rectangle(4.0, 3.0)
THREE = Spans(40.0)
QUARTER = Spans(40.0, 20.0)
THIRD = Spans(120.0, 40.0)


@pytest.mark.parametrize(
    ("force_n", "section", "spans", "exact_mpa"),
    [
        (100.0, BAR, THREE, 500.0 / 3.0),  # K
        (100.0, BAR, QUARTER, 250.0 / 3.0),  # K
        (1000.0, Rectangle(40.0, 40.0), THIRD, 1.875),  # K
        (30000.0, Rectangle(150.0, 150.0), Spans(450.0, 150.0), 4.0),  # K, EN 12390-5 form M
        (30000.0, Rectangle(150.0, 150.0), Spans(450.0), 6.0),  # 3Fl/(2 d1 d2^2), M
        (3000.0, Rectangle(40.0, 40.0), Spans(100.0), 7.03125),  # EN 196-1 dimensions C, value K
    ],
)
def test_stress_is_exact(force_n: float, section: Section, spans: Spans, exact_mpa: float):
    assert beam_stress_mpa(force_n, section, spans) == pytest.approx(exact_mpa, rel=EXACT)


@pytest.mark.parametrize(
    ("force_n", "section", "spans", "printed"),
    [
        (100.0, Circle(5.0), Spans(50.0), 101.8591636),  # K
        (100.0, Circle(5.0), Spans(40.0, 20.0), 40.7436654),  # K
        (1000.0, Tube(10.0, 6.0), Spans(100.0), 292.5642336),  # K
        (1500.0, Rectangle(300.0, 8.5), Spans(280.0), 29.0657439),  # ISO 10545-4 definition C, value K
        (2000.0, Rectangle(360.0, 6.0), Spans(1000.0, 200.0), 185.18519),  # EN 1288-3 first term, K
    ],
)
def test_stress_agrees_with_computed_values(force_n: float, section: Section, spans: Spans, printed: float):
    digits = len(f"{printed}".split(".")[1])
    assert beam_stress_mpa(force_n, section, spans) == pytest.approx(printed, abs=0.51 * 10.0**-digits)


def test_stress_and_force_are_inverse():
    assert force_for_stress_n(beam_stress_mpa(123.4, BAR, QUARTER), BAR, QUARTER) == pytest.approx(
        123.4, rel=EXACT
    )


def test_the_rounded_mortar_factor_is_within_half_a_percent():
    """ASTM C348 prints 0.0028 F (M); exact at L = 119.5 mm, 0.0027891 at 119 mm (K)."""
    prism = Rectangle(40.0, 40.0)
    assert beam_stress_mpa(1.0, prism, Spans(119.5)) == pytest.approx(0.0028, rel=1e-3)
    assert beam_stress_mpa(1.0, prism, Spans(119.0)) == pytest.approx(0.0027891, abs=1e-7)
    assert beam_stress_mpa(1.0, prism, Spans(119.0)) == pytest.approx(0.0028, rel=5e-3)


def test_glass_plate_with_its_own_weight():
    """EN 1288-3 formula C, value K."""
    plate = Rectangle(360.0, 6.0)
    assert dead_weight_stress_mpa(6.0, 1000.0, 2500.0) == pytest.approx(3.065625, rel=EXACT)
    assert glass_plate_stress_mpa(2000.0, plate, Spans(1000.0, 200.0)) == pytest.approx(
        185.18519 + 3.065625, abs=6e-6
    )


def test_tile_breaking_strength_is_a_force():
    assert breaking_strength_n(1500.0, 280.0, 300.0) == 1400.0  # ISO 10545-4 C, value K


def test_offcentre_break_of_a_beam():
    """C78 form M + K: continuous with FL/bd^2 where the load span ends."""
    beam = Rectangle(150.0, 150.0)
    assert offcentre_stress_mpa(30000.0, 145.0, beam) == pytest.approx(3.8666667, abs=1e-7)
    assert offcentre_stress_mpa(30000.0, 150.0, beam) == pytest.approx(
        beam_stress_mpa(30000.0, beam, Spans(450.0, 150.0)), rel=EXACT
    )
    # acceptance scenario 6: 100 x 100 on 300, 15.0 kN, 12 mm outside the middle third
    assert offcentre_stress_mpa(15000.0, 88.0, Rectangle(100.0, 100.0)) == pytest.approx(3.96, rel=EXACT)


def test_unit_factors():
    assert pytest.approx(6.894757e-3, abs=5e-10) == MPA_PER_PSI
    assert N_PER_KGF == 9.80665
    assert pytest.approx(4.4482216, abs=5e-8) == N_PER_LBF


@pytest.mark.parametrize(
    ("spans", "k_mid", "k_load", "c_mid", "c_load"),
    [  # exact rationals, K; D790 and ISO 178 C, D6272 and ISO 14125 M
        (Spans(40.0), 6.0, 6.0, 1 / 4, 1 / 4),
        (Spans(40.0, 20.0), 48 / 11, 6.0, 11 / 64, 1 / 8),
        (Spans(120.0, 40.0), 108 / 23, 27 / 5, 23 / 108, 5 / 27),
        (Spans(1000.0, 200.0), 300 / 59, 75 / 14, 59 / 250, 28 / 125),
    ],
)
def test_strain_and_modulus_coefficients(
    spans: Spans, k_mid: float, k_load: float, c_mid: float, c_load: float
):
    assert strain_factor_mid(spans) == pytest.approx(k_mid, rel=EXACT)
    assert strain_factor_load_point(spans) == pytest.approx(k_load, rel=EXACT)
    unit = spans.support_mm**3 / (BAR.width_mm * BAR.thickness_mm**3)
    assert modulus_from_mid_slope_mpa(1.0, BAR, spans) == pytest.approx(c_mid * unit, rel=EXACT)
    assert modulus_from_load_point_slope_mpa(1.0, BAR, spans) == pytest.approx(c_load * unit, rel=EXACT)


@pytest.mark.parametrize("spans", [THREE, QUARTER, THIRD, Spans(1000.0, 200.0)])
def test_hooke_closes_the_circle(spans: Spans):
    """Stress over strain is E from either place of measurement; the two places never give the same strain
    else.
    """
    modulus_mpa, force_n = 300e3, 250.0
    stress = beam_stress_mpa(force_n, BAR, spans)
    mid = mid_deflection_mm(force_n, modulus_mpa, BAR, spans)
    load = load_point_deflection_mm(force_n, modulus_mpa, BAR, spans)
    assert stress / strain_from_mid(mid, BAR, spans) == pytest.approx(modulus_mpa, rel=EXACT)
    assert stress / strain_from_load_point(load, BAR, spans) == pytest.approx(modulus_mpa, rel=EXACT)
    if spans.load_mm:
        assert stress / strain_from_curvature(mid - load, BAR, spans) == pytest.approx(modulus_mpa, rel=1e-9)


@pytest.mark.parametrize(("spans", "error"), [(QUARTER, 1.375), (THIRD, 5.4 / (108 / 23))])
def test_the_trap_of_the_wrong_place(spans: Spans, error: float):
    """Crosshead travel put into the mid-span formula is wrong by 1.375 (quarter) or 1.150 (third), K."""
    travel_mm = load_point_deflection_mm(200.0, 380e3, BAR, spans)
    right, wrong = strain_from_load_point(travel_mm, BAR, spans), strain_from_mid(travel_mm, BAR, spans)
    assert right / wrong == pytest.approx(error, rel=EXACT)


def test_stiffness_of_bar_and_frame():
    """E = 300 GPa, 4 x 3 on 40: 2025 N/mm three-point, 4050 at the quarter points; frame 10 kN/mm, K."""
    three, quarter = (
        load_point_stiffness_n_mm(300e3, BAR, THREE),
        load_point_stiffness_n_mm(300e3, BAR, QUARTER),
    )
    assert (three, quarter) == (pytest.approx(2025.0, rel=EXACT), pytest.approx(4050.0, rel=EXACT))
    assert mid_stiffness_n_mm(300e3, BAR, THREE) == pytest.approx(2025.0, rel=EXACT)
    assert apparent_modulus_share(three, 10e3) == pytest.approx(0.83160, abs=5e-6)
    assert apparent_modulus_share(quarter, 10e3) == pytest.approx(0.71174, abs=5e-6)


@pytest.mark.parametrize(
    ("section", "spans", "speed_mm_min", "rate_per_s"),
    [  # ASTM C1161 sizes A, B, C: M values, K consistent
        (Rectangle(2.0, 1.5), Spans(20.0, 10.0), 0.2, 7.500e-5),
        (BAR, QUARTER, 0.5, 9.375e-5),
        (BAR, THREE, 0.5, 9.375e-5),
        (Rectangle(8.0, 6.0), Spans(80.0, 40.0), 1.0, 9.375e-5),
        (Rectangle(10.0, 4.0), Spans(64.0), 2.0, 0.01171875 / 60.0),  # ISO 178, K
    ],
)
def test_strain_rate(section: Section, spans: Spans, speed_mm_min: float, rate_per_s: float):
    assert strain_rate_per_s(speed_mm_min, section, spans) == pytest.approx(rate_per_s, rel=EXACT)


@pytest.mark.parametrize(
    ("section", "spans", "rate_per_min", "speed_mm_min"),
    [
        (Rectangle(12.7, 3.2), Spans(51.2), 0.01, 1.36533),  # D790 procedure A: Z C, value K
        (Rectangle(10.0, 4.0), Spans(64.0), 0.01, 1.7067),  # ISO 178 at 1 %/min, K
        (Rectangle(10.0, 4.0), Spans(60.0, 30.0), 0.01, 0.01 / 6 * 900.0),  # D6272 prints 0.167 Z L^2/d, M
        (Rectangle(10.0, 4.0), Spans(60.0, 20.0), 0.01, 0.01 * 5 / 27 * 900.0),  # D6272 prints 0.185, M
    ],
)
def test_speed_for_a_strain_rate(section: Section, spans: Spans, rate_per_min: float, speed_mm_min: float):
    assert speed_for_strain_rate_mm_min(rate_per_min / 60.0, section, spans) == pytest.approx(
        speed_mm_min, rel=3e-5
    )


def test_modulus_points_of_iso_178():
    """eps 0.0005 and 0.0025 at 0.0853333 and 0.4266667 mm; 1 % of the difference is 3.4 um (C, value K)."""
    bar, spans = Rectangle(10.0, 4.0), Spans(64.0)
    assert strain_from_mid(0.0853333, bar, spans) == pytest.approx(0.0005, rel=1e-6)
    assert strain_from_mid(0.4266667, bar, spans) == pytest.approx(0.0025, rel=1e-6)
    assert strain_from_mid(6.0, bar, spans) == pytest.approx(
        0.03515625, rel=EXACT
    )  # s = 1.5h at L = 16h, M, K


@pytest.mark.parametrize(
    ("section", "spans", "stress_rate", "force_rate", "tolerance"),
    [
        (Rectangle(40.0, 40.0), Spans(100.0), 0.1171875, 50.0, EXACT),  # EN 196-1: rate C, value K
        (Rectangle(100.0, 100.0), Spans(300.0, 100.0), 0.05, 166.667, 3e-6),  # EN 12390-5, M, K
        (Rectangle(150.0, 150.0), Spans(450.0, 150.0), 0.05, 375.0, EXACT),
        (Rectangle(150.0, 150.0), Spans(450.0, 150.0), 1.0 / 60.0, 7500.0 / 60.0, EXACT),  # C78, M, K
        (Rectangle(150.0, 150.0), Spans(450.0), 1.0 / 60.0, 5000.0 / 60.0, EXACT),  # C293, M, K
    ],
)
def test_stress_rate_and_force_rate(
    section: Section, spans: Spans, stress_rate: float, force_rate: float, tolerance: float
):
    assert stress_rate_mpa_s(force_rate, section, spans) == pytest.approx(
        stress_rate, rel=max(tolerance, 1e-12)
    )
    assert force_rate_for_stress_rate_n_s(stress_rate, section, spans) == pytest.approx(
        force_rate, rel=tolerance
    )


def test_real_frame_slows_the_stress_rate():
    """Worked out beforehand: alumina 380 GPa, 4 x 3 on 40/20, 0.5 mm/min, 10 kN/mm: 23.6 MPa/s against 36 on a rigid
    one.
    """
    bar_n_mm = load_point_stiffness_n_mm(380e3, BAR, QUARTER)
    real = stress_rate_mpa_s(force_rate_n_s(0.5, bar_n_mm, 10e3), BAR, QUARTER)
    rigid = 380e3 * strain_rate_per_s(0.5, BAR, QUARTER)
    assert real == pytest.approx(23.6, abs=0.1)
    assert rigid == pytest.approx(35.6, abs=0.05)
