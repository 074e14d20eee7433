"""What the published values do not reach: tables, rounded edges, round bars, arrays."""

import numpy as np
import pytest

from daq.mechanics.compliance import ComplianceTable, machine_deflection_mm, machine_share, remove_machine_mm
from daq.mechanics.deflection import shear_share_load_point, shear_share_mid, strain_from_mid
from daq.mechanics.edges import chamfer_factor, rounded_edge_factor
from daq.mechanics.sections import Circle, Rectangle, Spans, Tube, section_modulus_mm3
from daq.mechanics.stress import beam_stress_mpa

BAR = Rectangle(4.0, 3.0)


def second_moment_by_strips(width_mm, h, shortening) -> float:
    """Midpoint rule over strips of the true width at each height."""
    y = h * ((np.arange(400_000) + 0.5) / 400_000 - 0.5)
    return float(np.mean((width_mm - 2.0 * shortening(h / 2.0 - np.abs(y))) * y**2) * h)


@pytest.mark.parametrize("leg_mm", [0.05, 0.12, 0.5])
def test_chamfer_agrees_with_strips(leg_mm: float):
    exact = BAR.second_moment_mm4 / second_moment_by_strips(
        4.0, 3.0, lambda d: np.clip(leg_mm - d, 0.0, None)
    )
    assert chamfer_factor(BAR, leg_mm) == pytest.approx(exact, rel=1e-8)


@pytest.mark.parametrize("radius_mm", [0.05, 0.2, 1.0])
def test_rounded_edge_agrees_with_strips(radius_mm: float):
    def shortening(depth):
        inside = np.clip(radius_mm - depth, 0.0, None)
        return radius_mm - np.sqrt(radius_mm**2 - inside**2)

    exact = BAR.second_moment_mm4 / second_moment_by_strips(4.0, 3.0, shortening)
    assert rounded_edge_factor(BAR, radius_mm) == pytest.approx(exact, rel=1e-7)


def test_a_tube_without_a_bore_is_a_rod():
    rod, tube = Circle(5.0), Tube(5.0, 0.0)
    assert section_modulus_mm3(tube) == pytest.approx(section_modulus_mm3(rod), rel=1e-15)
    assert tube.area_mm2 == pytest.approx(rod.area_mm2, rel=1e-15)
    assert tube.shear_coefficient(0.25) == pytest.approx(rod.shear_coefficient(0.25), rel=1e-15)


def test_machine_part_is_removed_and_never_extrapolated():
    table = ComplianceTable(np.array([0.0, 100.0, 300.0]), np.array([0.0, 0.02, 0.04]))
    force_n = np.array([-1.0, 0.0, 50.0, 200.0, 300.0, 301.0])
    assert machine_deflection_mm(table, force_n) == pytest.approx(
        [np.nan, 0.0, 0.01, 0.03, 0.04, np.nan], nan_ok=True
    )
    assert remove_machine_mm(table, np.full(6, 0.1), force_n)[3] == pytest.approx(0.07)
    assert machine_share(table, 100.0, 300.0, 0.03) == pytest.approx(0.4)
    assert np.isnan(machine_share(table, 100.0, 400.0, 0.03))
    assert np.isnan(machine_share(table, 100.0, 300.0, -0.02))


def test_mortar_prism_on_a_soft_frame():
    """Springs in series: the bar is 9.7 of 159 um at 20 kN/mm, so 94 % of the travel is the machine's."""
    force_n = 2987.0
    table = ComplianceTable(np.array([0.0, 5000.0]), np.array([0.0, 5000.0 / 20e3]))
    assert machine_share(table, 0.0, force_n, 0.0097) == pytest.approx(0.939, abs=1e-3)


def test_arrays_and_numbers_agree():
    force_n = np.linspace(0.0, 500.0, 7)
    spans = Spans(40.0, 20.0)
    whole = beam_stress_mpa(force_n, BAR, spans)
    assert [beam_stress_mpa(float(f), BAR, spans) for f in force_n] == whole.tolist()
    assert strain_from_mid(force_n, BAR, spans).shape == (7,)


def test_shear_counts_more_at_the_load_rollers():
    """The shear part is the same at both places, the bending part smaller at the rollers."""
    spans = Spans(40.0, 20.0)
    mid, load = (f(BAR, spans, 0.25, 5.0 / 6.0) for f in (shear_share_mid, shear_share_load_point))
    assert load / mid == pytest.approx(11.0 / 8.0, rel=1e-12)
