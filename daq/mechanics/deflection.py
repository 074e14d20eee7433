"""Deflection, strain and modulus of a straight elastic bar, at mid-span or at the load rollers: never mixed
up.

A deflection sensor under the bar sees mid-span; the crosshead sees the load rollers. In three-point the two
are one. In four-point the same reading means 1.375 (quarter-point) or 1.150 (third-point) times more or less
strain, so each function names its place. Sources: elementary beam theory, exact rationals.
"""

from __future__ import annotations

from daq.mechanics.quantity import Quantity
from daq.mechanics.sections import Section, Spans


def _mid_cubic_mm3(spans: Spans) -> float:
    """a(3L^2 - 4a^2)."""
    a = spans.arm_mm
    return a * (3.0 * spans.support_mm**2 - 4.0 * a**2)


def _load_cubic_mm3(spans: Spans) -> float:
    """a^2(3L - 4a)."""
    a = spans.arm_mm
    return a**2 * (3.0 * spans.support_mm - 4.0 * a)


def mid_deflection_mm(force_n: Quantity, modulus_mpa: float, section: Section, spans: Spans) -> Quantity:
    """F a(3L^2-4a^2)/(48EI)."""
    return force_n * (_mid_cubic_mm3(spans) / (48.0 * modulus_mpa * section.second_moment_mm4))


def load_point_deflection_mm(
    force_n: Quantity, modulus_mpa: float, section: Section, spans: Spans
) -> Quantity:
    """F a^2(3L-4a)/(12EI)."""
    return force_n * (_load_cubic_mm3(spans) / (12.0 * modulus_mpa * section.second_moment_mm4))


def mid_stiffness_n_mm(modulus_mpa: float, section: Section, spans: Spans) -> float:
    """Force over mid-span deflection, bending only."""
    return 48.0 * modulus_mpa * section.second_moment_mm4 / _mid_cubic_mm3(spans)


def load_point_stiffness_n_mm(modulus_mpa: float, section: Section, spans: Spans) -> float:
    """Force over load-roller deflection, bending only: what the crosshead would see on a rigid frame."""
    return 12.0 * modulus_mpa * section.second_moment_mm4 / _load_cubic_mm3(spans)


def strain_per_mid_mm(section: Section, spans: Spans) -> float:
    """Outer-fibre strain for 1 mm at mid-span: 12h/(3L^2-4a^2)."""
    return 12.0 * section.depth_mm / (3.0 * spans.support_mm**2 - 4.0 * spans.arm_mm**2)


def strain_per_load_point_mm(section: Section, spans: Spans) -> float:
    """Outer-fibre strain for 1 mm at the load rollers: 3h/(a(3L-4a))."""
    a = spans.arm_mm
    return 3.0 * section.depth_mm / (a * (3.0 * spans.support_mm - 4.0 * a))


def strain_from_mid(deflection_mm: Quantity, section: Section, spans: Spans) -> Quantity:
    """Strain from a sensor under mid-span."""
    return deflection_mm * strain_per_mid_mm(section, spans)


def strain_from_load_point(deflection_mm: Quantity, section: Section, spans: Spans) -> Quantity:
    """Strain from crosshead travel, machine part already removed."""
    return deflection_mm * strain_per_load_point_mm(section, spans)


def strain_from_curvature(sagitta_mm: Quantity, section: Section, spans: Spans) -> Quantity:
    """Strain from mid-span deflection relative to the load rollers, four-point only: 4h s/Li^2."""
    assert spans.load_mm > 0
    return sagitta_mm * (4.0 * section.depth_mm / spans.load_mm**2)


def strain_factor_mid(spans: Spans) -> float:
    """K in eps = K h s/L^2 for mid-span: 6, 48/11, 108/23 for three-, quarter- and third-point."""
    return 12.0 * spans.support_mm**2 / (3.0 * spans.support_mm**2 - 4.0 * spans.arm_mm**2)


def strain_factor_load_point(spans: Spans) -> float:
    """K in eps = K h s/L^2 for the load rollers: 6, 6, 27/5."""
    a = spans.arm_mm
    return 3.0 * spans.support_mm**2 / (a * (3.0 * spans.support_mm - 4.0 * a))


def modulus_from_mid_slope_mpa(slope_n_mm: Quantity, section: Section, spans: Spans) -> Quantity:
    """E from dF/ds at mid-span; rectangle three-point: L^3 m/(4bh^3)."""
    return slope_n_mm * (_mid_cubic_mm3(spans) / (48.0 * section.second_moment_mm4))


def modulus_from_load_point_slope_mpa(slope_n_mm: Quantity, section: Section, spans: Spans) -> Quantity:
    """E from dF/ds at the load rollers; quarter-point: L^3 m/(8bh^3)."""
    return slope_n_mm * (_load_cubic_mm3(spans) / (12.0 * section.second_moment_mm4))


def shear_share_mid(section: Section, spans: Spans, poisson_ratio: float, shear_coefficient: float) -> float:
    """Shear deflection over bending deflection at mid-span, isotropic bar (E/G = 2(1+nu)).

    Timoshenko beam: shear part F a/(2 kappa G A) for any span ratio, FL/(4 kappa G A) in three-point.
    Rectangle, kappa 5/6, three-point: 2.4(1+nu)(h/L)^2.
    """
    bending = _mid_cubic_mm3(spans) / (48.0 * section.second_moment_mm4)
    return _shear_per_modulus(section, spans, poisson_ratio, shear_coefficient) / bending


def shear_share_load_point(
    section: Section, spans: Spans, poisson_ratio: float, shear_coefficient: float
) -> float:
    """Shear deflection over bending deflection at the load rollers; same shear part as at mid-span."""
    bending = _load_cubic_mm3(spans) / (12.0 * section.second_moment_mm4)
    return _shear_per_modulus(section, spans, poisson_ratio, shear_coefficient) / bending


def shear_share_plane_stress(depth_mm: float, support_span_mm: float, poisson_ratio: float) -> float:
    """Three-point rectangle by plane elasticity, leading term: (24 + 15 nu)/10 (h/L)^2 of the bending deflection.

    Timoshenko prints 2.85 (h/L)^2 - 0.84 (h/L)^3 at nu = 0.3 (from memory); finite elements confirm 2.85 in the limit
    and fall by 1.26 h/L with the support rollers' own effect. A reference beside the beam term.
    """
    return (24.0 + 15.0 * poisson_ratio) / 10.0 * (depth_mm / support_span_mm) ** 2


def _shear_per_modulus(
    section: Section, spans: Spans, poisson_ratio: float, shear_coefficient: float
) -> float:
    """E times the shear deflection of 1 N: a (E/G)/(2 kappa A)."""
    modulus_ratio = 2.0 * (1.0 + poisson_ratio)
    return spans.arm_mm * modulus_ratio / (2.0 * shear_coefficient * section.area_mm2)
