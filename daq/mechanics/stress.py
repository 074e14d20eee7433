"""Nominal beam stress from force, and the same at a place along the bar. No correction is hidden in here.

Elementary beam theory throughout: sigma = M/W with M = F a/2 between the load rollers. The products' own
printed forms (3FL/2bh^2, 3FL/4bh^2, FL/bh^2, 8FL/pi d^3, 16Fa/pi d^3) are the same number; tests/published
shows it.
"""

from __future__ import annotations

import numpy as np

from daq.mechanics.quantity import Floats, Quantity
from daq.mechanics.sections import Rectangle, Section, Spans, section_modulus_mm3


def stress_per_newton_mpa(section: Section, spans: Spans) -> float:
    """Nominal stress of 1 N: a/(2W)."""
    return spans.arm_mm / (2.0 * section_modulus_mm3(section))


def beam_stress_mpa(force_n: Quantity, section: Section, spans: Spans) -> Quantity:
    """Outer-fibre stress at mid-span; rectangle: 3F(L-Li)/(2bh^2)."""
    return force_n * stress_per_newton_mpa(section, spans)


def force_for_stress_n(stress_mpa: Quantity, section: Section, spans: Spans) -> Quantity:
    """The force that gives this nominal stress."""
    return stress_mpa / stress_per_newton_mpa(section, spans)


def moment_share(from_mid_mm: float | Floats, spans: Spans) -> Floats:
    """Bending moment at a place over the greatest: 1 inside the load span, (L/2-|x|)/a outside, 0 beyond the
    supports.

    Three-point: 1 - 2|x|/L. Both from statics.
    """
    outside = (spans.support_mm / 2.0 - np.abs(np.asarray(from_mid_mm, dtype=np.float64))) / spans.arm_mm
    return np.clip(outside, 0.0, 1.0)


def moment_share_integral_mm(from_mid_mm: float, spans: Spans) -> float:
    """Integral of `moment_share` from mid-span to x (odd in x); the piece of a gauge or of an effective
    length.
    """
    half_load_mm, half_support_mm = spans.load_mm / 2.0, spans.support_mm / 2.0
    x_mm = min(abs(from_mid_mm), half_support_mm)
    beyond_mm = max(x_mm - half_load_mm, 0.0)
    inside_mm = min(x_mm, half_load_mm)
    slope_part = beyond_mm * (1.0 - beyond_mm / (2.0 * spans.arm_mm))
    return float(np.sign(from_mid_mm)) * (inside_mm + slope_part)


def offcentre_stress_mpa(force_n: float, support_distance_mm: float, section: Rectangle) -> float:
    """Stress at a break outside the load span of a concrete or graphite beam: 3F af/(b d^2).

    af = distance from the break to the nearest support, on the tension face. Form used by ASTM C78 and C651
    (formula from memory; continuous with FL/bd^2 at af = L/3). Whether such a break counts is the method
    card's rule.
    """
    return 3.0 * force_n * support_distance_mm / (section.width_mm * section.thickness_mm**2)


def dead_weight_stress_mpa(thickness_mm: float, support_span_mm: float, density_kg_m3: float) -> float:
    """A plate's own weight over the supports: 3 rho g L^2/(4h), EN 1288-3 form (confirmed from a public
    excerpt).
    """
    weight_n_mm3 = density_kg_m3 * 9.81e-9
    return 3.0 * weight_n_mm3 * support_span_mm**2 / (4.0 * thickness_mm)


def glass_plate_stress_mpa(
    force_n: float,
    section: Rectangle,
    spans: Spans,
    *,
    density_kg_m3: float = 2500.0,
    edge_factor: float = 1.0,
) -> float:
    """EN 1288-3 form (confirmed from a public excerpt): k_e [3F(Ls-Lb)/(2Bh^2) + sigma_G]; k_e is the
    card's.
    """
    own_mpa = dead_weight_stress_mpa(section.thickness_mm, spans.support_mm, density_kg_m3)
    return edge_factor * (beam_stress_mpa(force_n, section, spans) + own_mpa)


def breaking_strength_n(force_n: float, support_span_mm: float, width_mm: float) -> float:
    """Tiles, ISO 10545-4 form (confirmed from a public excerpt): S = F L/b, a force, not a stress."""
    return force_n * support_span_mm / width_mm
