"""Effective volume and surface of a flexure bar, and what a change of size or loading does to strength.

Source: closed forms of the Weibull integral over the beam stress (first
principles). Volume integrates the tension half only; surface is the tension face and the two sides.
"""

from __future__ import annotations

import math

from daq.mechanics.sections import Circle, Rectangle, Spans


def effective_volume_mm3(section: Rectangle | Circle, spans: Spans, modulus: float) -> float:
    """Rectangle: bhL(1+mLi/L)/(2(m+1)^2); rod: V K_V (1+mLi/L)/(m+1)."""
    length_mm = effective_length_mm(spans, modulus)
    if isinstance(section, Rectangle):
        return section.area_mm2 * length_mm / (2.0 * (modulus + 1.0))
    return section.area_mm2 * length_mm * rod_volume_factor(modulus)


def effective_surface_mm2(section: Rectangle | Circle, spans: Spans, modulus: float) -> float:
    """Rectangle: [(L+mLi)/(m+1)][b+h/(m+1)]; rod: pi d L K_S times the same length share."""
    length_mm = effective_length_mm(spans, modulus)
    if isinstance(section, Rectangle):
        return length_mm * (section.width_mm + section.thickness_mm / (modulus + 1.0))
    return math.pi * section.diameter_mm * length_mm * rod_surface_factor(modulus)


def effective_length_mm(spans: Spans, modulus: float) -> float:
    """(L + m Li)/(m + 1): the integral of (M/Mmax)^m along the bar."""
    return (spans.support_mm + modulus * spans.load_mm) / (modulus + 1.0)


def rod_volume_factor(modulus: float) -> float:
    """K_V = Gamma((m+1)/2)/(sqrt(pi)(m+2)Gamma(m/2+1))."""
    return _gamma_ratio(modulus) / (math.sqrt(math.pi) * (modulus + 2.0))


def rod_surface_factor(modulus: float) -> float:
    """K_S = Gamma((m+1)/2)/(2 sqrt(pi) Gamma(m/2+1))."""
    return _gamma_ratio(modulus) / (2.0 * math.sqrt(math.pi))


def _gamma_ratio(modulus: float) -> float:
    return math.exp(math.lgamma((modulus + 1.0) / 2.0) - math.lgamma(modulus / 2.0 + 1.0))


def scaled_strength_mpa(strength_mpa: float, size_from: float, size_to: float, modulus: float) -> float:
    """s1/s2 = (V2/V1)^(1/m), the same with effective surfaces."""
    return float(strength_mpa * (size_from / size_to) ** (1.0 / modulus))


def three_to_quarter_point_ratio(modulus: float) -> float:
    """Strength in three-point over that in quarter-point at equal bar and span: ((m+2)/2)^(1/m)."""
    return float(((modulus + 2.0) / 2.0) ** (1.0 / modulus))
