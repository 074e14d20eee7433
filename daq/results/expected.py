"""What a bar is expected to bear: median and P10-P90 band, from the plan or from the bars of the
series so far.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from daq.cards.method import MethodCard

BARS_MIN = 5  # fewer tell nothing: the plan stands
P90_SIGMAS = 1.2815515655446004  # of a normal distribution


@dataclass(frozen=True, slots=True)
class Band:
    """Strengths in MPa. from_bars: of the series so far, not of the plan."""

    low_mpa: float
    median_mpa: float
    high_mpa: float
    from_bars: bool


def planned_quantile_mpa(method: MethodCard, probability: float) -> float:
    """Two-parameter Weibull with the card's mean and modulus: s0 (-ln(1-P))^(1/m), s0 = mean/Gamma(1+1/m)."""
    m = method.expected.weibull_modulus
    scale_mpa = method.expected.strength_mpa / math.gamma(1.0 + 1.0 / m)
    return float(scale_mpa * (-math.log1p(-probability)) ** (1.0 / m))


def band_of(method: MethodCard, strengths_mpa: Sequence[float] = ()) -> Band:
    """P10, P50 and P90; from five bars on mean -+ 1.28 standard deviations of those (common practice,
    no source).
    """
    if len(strengths_mpa) >= BARS_MIN:
        mean = math.fsum(strengths_mpa) / len(strengths_mpa)
        spread = math.sqrt(math.fsum((s - mean) ** 2 for s in strengths_mpa) / (len(strengths_mpa) - 1))
        return Band(mean - P90_SIGMAS * spread, mean, mean + P90_SIGMAS * spread, from_bars=True)
    low, median, high = (planned_quantile_mpa(method, p) for p in (0.1, 0.5, 0.9))
    return Band(low, median, high, from_bars=False)
