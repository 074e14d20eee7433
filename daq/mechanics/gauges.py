"""Strain gauges on a flexure bar: what a finite length averages, and what bending crosswise adds."""

from __future__ import annotations

from daq.mechanics.sections import Spans
from daq.mechanics.stress import moment_share_integral_mm


def gauge_mean_share(length_mm: float, from_mid_mm: float, spans: Spans) -> float:
    """Mean stress over a gauge of length g centred at x0, over the greatest stress; exact for any span ratio.

    Three-point across mid-span: 1 - (2/L)(x0^2 + g^2/4)/g; clear of it: 1 - 2|x0|/L (integral of the moment
    line).
    """
    assert length_mm > 0
    upper = moment_share_integral_mm(from_mid_mm + length_mm / 2.0, spans)
    lower = moment_share_integral_mm(from_mid_mm - length_mm / 2.0, spans)
    return (upper - lower) / length_mm


def transverse_factor(
    transverse_sensitivity: float, poisson_ratio: float, reference_ratio: float = 0.285
) -> float:
    """Uniaxial stress: factor (1 - nu0 Kt)/(1 - nu Kt) on the indicated strain (trade formula, nu0 of the
    maker).
    """
    k = transverse_sensitivity
    return (1.0 - reference_ratio * k) / (1.0 - poisson_ratio * k)


def transverse_strain(
    along: float, across: float, transverse_sensitivity: float, reference_ratio: float = 0.285
) -> float:
    """Two gauges at right angles: (1 - nu0 Kt)(e_x - Kt e_y)/(1 - Kt^2) (trade formula)."""
    k = transverse_sensitivity
    return (1.0 - reference_ratio * k) * (along - k * across) / (1.0 - k**2)
