"""Strain gauges on a flexure bar: what a finite length averages, and what bending crosswise adds."""

from __future__ import annotations

import numpy as np

from daq.mechanics.contact import roller_stress_mpa
from daq.mechanics.sections import Rectangle, Spans
from daq.mechanics.stress import beam_stress_mpa, moment_share_integral_mm


def gauge_mean_share(length_mm: float, from_mid_mm: float, spans: Spans) -> float:
    """Mean stress over a gauge of length g centred at x0, over the greatest stress; exact for any span ratio.

    Three-point across mid-span: 1 - (2/L)(x0^2 + g^2/4)/g; clear of it: 1 - 2|x0|/L (integral of the moment
    line).
    """
    assert length_mm > 0
    upper = moment_share_integral_mm(from_mid_mm + length_mm / 2.0, spans)
    lower = moment_share_integral_mm(from_mid_mm - length_mm / 2.0, spans)
    return (upper - lower) / length_mm


def gauge_roller_share(length_mm: float, from_mid_mm: float, section: Rectangle, spans: Spans) -> float:
    """What the load rollers' own stress adds to the gauge's mean, over the nominal stress (tension face).

    Mean of the strip solution over the gauge, Gauss-Legendre; 0 far from the rollers.
    """
    assert length_mm > 0
    node, weight = np.polynomial.legendre.leggauss(32)
    x_mm = from_mid_mm + length_mm / 2.0 * node
    local_mpa = roller_stress_mpa(x_mm, 1.0, section, spans)
    return float(weight @ local_mpa) / 2.0 / beam_stress_mpa(1.0, section, spans)


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
