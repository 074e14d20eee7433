"""Did strength drift with order, size, rate, humidity or tare shift? Spearman's rank correlation; job
map I3.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats

CAUTION_SIGMAS = 2.5758293035489004  # |rho| sqrt(n - 1): 0.48 at n = 30
BARS_MIN = 5


@dataclass(frozen=True, slots=True)
class Trend:
    """rho; p two-sided from Student's t with n - 2 degrees of freedom (an approximation that is good
    from n = 10 on).
    """

    rho: float
    p: float
    n: int

    @property
    def caution(self) -> bool:
        """|rho| above 2.576/sqrt(n-1): 0.48 at n = 30, where p is 0.007."""
        return abs(self.rho) > CAUTION_SIGMAS / math.sqrt(self.n - 1)


def trend_of(strengths_mpa: Sequence[float], against: Sequence[float]) -> Trend | None:
    """None below five bars, or where one of the two does not vary."""
    x, y = _ranks(np.asarray(strengths_mpa, dtype=np.float64)), _ranks(np.asarray(against, dtype=np.float64))
    assert x.size == y.size
    if x.size < BARS_MIN or np.ptp(x) == 0.0 or np.ptp(y) == 0.0:
        return None
    dx, dy = x - x.mean(), y - y.mean()
    rho = float(dx @ dy / math.sqrt(float(dx @ dx) * float(dy @ dy)))
    rho = min(max(rho, -1.0), 1.0)
    n = int(x.size)
    t = math.inf if abs(rho) == 1.0 else abs(rho) * math.sqrt((n - 2) / (1.0 - rho**2))
    return Trend(rho, student_two_sided(t, n - 2), n)


def _ranks(values: Floats) -> Floats:
    """1 to n; equal values share the mean of their ranks."""
    _, place, counts = np.unique(values, return_inverse=True, return_counts=True)
    last = np.cumsum(counts)
    means: Floats = last - (counts - 1) / 2.0
    return means[place]


def student_two_sided(t: float, degrees: int) -> float:
    """P(|T| > t): the finite sums for whole degrees of freedom (Abramowitz and Stegun 26.7.3 and
    26.7.4, from memory).
    """
    assert t >= 0 and degrees >= 1
    angle = math.atan2(t, math.sqrt(degrees))
    sine, cosine2 = math.sin(angle), math.cos(angle) ** 2
    if degrees == 1:
        return 1.0 - 2.0 * angle / math.pi
    first = 2 if degrees % 2 == 0 else 3
    term = total = 1.0
    for k in range(first, degrees - 1, 2):
        term *= cosine2 * (k - 1) / k
        total += term
    if degrees % 2 == 0:
        return max(1.0 - sine * total, 0.0)
    return max(1.0 - 2.0 / math.pi * (angle + sine * math.cos(angle) * total), 0.0)
