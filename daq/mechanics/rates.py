"""Rates of a flexure test: what a crosshead speed does to strain, force and stress, on a rigid or a real
frame.
"""

from __future__ import annotations

from daq.mechanics.deflection import strain_per_load_point_mm
from daq.mechanics.sections import Section, Spans
from daq.mechanics.stress import stress_per_newton_mpa

SECONDS_PER_MINUTE = 60.0


def strain_rate_per_s(speed_mm_min: float, section: Section, spans: Spans) -> float:
    """Rigid frame: K_load h v/L^2; 6hv/L^2 in three-point and quarter-point (form of ASTM C1161, from
    memory).
    """
    return strain_per_load_point_mm(section, spans) * speed_mm_min / SECONDS_PER_MINUTE


def speed_for_strain_rate_mm_min(strain_rate_per_s_set: float, section: Section, spans: Spans) -> float:
    """Rigid frame: the crosshead speed that gives this outer-fibre strain rate (D790: Z L^2/(6d),
    confirmed).
    """
    return strain_rate_per_s_set * SECONDS_PER_MINUTE / strain_per_load_point_mm(section, spans)


def force_rate_n_s(speed_mm_min: float, bar_stiffness_n_mm: float, frame_stiffness_n_mm: float) -> float:
    """Two springs in series: v k_s k_m/(k_s + k_m). Springs, no source needed."""
    series_n_mm = bar_stiffness_n_mm * frame_stiffness_n_mm / (bar_stiffness_n_mm + frame_stiffness_n_mm)
    return speed_mm_min / SECONDS_PER_MINUTE * series_n_mm


def apparent_modulus_share(bar_stiffness_n_mm: float, frame_stiffness_n_mm: float) -> float:
    """Apparent over true modulus when the frame's own give is not removed: 1/(1 + k_s/k_m)."""
    return 1.0 / (1.0 + bar_stiffness_n_mm / frame_stiffness_n_mm)


def stress_rate_mpa_s(force_rate: float, section: Section, spans: Spans) -> float:
    """Stress rate of a force rate in N/s; EN 196-1's 50 N/s is 0.1171875 MPa/s."""
    return force_rate * stress_per_newton_mpa(section, spans)


def force_rate_for_stress_rate_n_s(stress_rate: float, section: Section, spans: Spans) -> float:
    """Force rate in N/s of a stress rate in MPa/s; third-point: s b d^2/L (EN 12390-5, C78 form, from
    memory).
    """
    return stress_rate / stress_per_newton_mpa(section, spans)
