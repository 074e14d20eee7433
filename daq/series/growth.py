"""Slow crack growth from strength at several stress rates: constant stress-rate testing.

Source: ASTM C1368 (form from memory; algebra checked): log s = (1/(n+1)) log rate + log D, base-10
logarithms, every bar a point. v = A (K/K_IC)^n.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.results.fits import fit_curve


@dataclass(frozen=True, slots=True)
class CrackGrowth:
    """slope alpha and intercept beta of the line with their standard deviations; n = 1/alpha - 1, D =
    10^beta.
    """

    slope: float
    intercept: float
    slope_sd: float
    intercept_sd: float
    correlation: float

    @property
    def n(self) -> float:
        return 1.0 / self.slope - 1.0

    @property
    def n_sd(self) -> float:
        return self.slope_sd / self.slope**2

    @property
    def d_mpa(self) -> float:
        return float(10.0**self.intercept)

    @property
    def d_sd_mpa(self) -> float:
        return math.log(10.0) * self.intercept_sd * self.d_mpa


def fit_crack_growth(rates_mpa_s: Sequence[float], strengths_mpa: Sequence[float]) -> CrackGrowth | None:
    """None below three bars, or where all were tested at one rate. A slope <= 0 means no slow crack
    growth was seen.
    """
    x, y = np.log10(np.asarray(rates_mpa_s)), np.log10(np.asarray(strengths_mpa))
    if x.size < 3 or np.ptp(x) == 0.0:
        return None
    line = fit_curve(x, y, 2)
    if line.slope == 0.0:
        return None
    slope_sd = line.spread * math.sqrt(line.covariance[1][1])
    intercept_sd = line.spread * math.sqrt(line.covariance[0][0] + line.origin**2 * line.covariance[1][1])
    dx, dy = x - x.mean(), y - y.mean()
    correlation = float(dx @ dy / math.sqrt(float(dx @ dx) * float(dy @ dy)))
    return CrackGrowth(line.slope, line.at(0.0), slope_sd, intercept_sd, correlation)


def strength_at_rate_mpa(growth: CrackGrowth, rate_mpa_s: float) -> float:
    """The line's strength at a stress rate."""
    return float(growth.d_mpa * rate_mpa_s**growth.slope)


def strength_change_per_decade(n: float) -> float:
    """Relative rise of strength for ten times the rate: 10^(1/(n+1)) - 1 (constant stress rate, power law)."""
    return float(10.0 ** (1.0 / (n + 1.0)) - 1.0)


def damage_constant_mpa2_s(d_mpa: float, n: float, inert_mpa: float) -> float:
    """B from D = [B(n+1) Si^(n-2)]^(1/(n+1)), Si the strength without crack growth."""
    return math.exp((n + 1.0) * math.log(d_mpa) - math.log(n + 1.0) - (n - 2.0) * math.log(inert_mpa))
