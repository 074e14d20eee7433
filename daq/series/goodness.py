"""Does the fitted distribution describe the bars? Kolmogorov's D and Anderson and Darling's A2 of the fit
itself.

Only for complete samples. The parameters come from the same data, so textbook tables for known parameters do
not hold.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.series.weibull import WeibullFit

# Upper percentage points of A2 (1 + 0.2/sqrt(n)), both parameters estimated: Stephens 1977 (from memory; the
# tests
# repeat them by simulation).
A2_POINTS = ((0.10, 0.637), (0.05, 0.757), (0.025, 0.877), (0.01, 1.038))


@dataclass(frozen=True, slots=True)
class Goodness:
    """doubt: the smallest of 0.10, 0.05, 0.025, 0.01 at which the fit is to be doubted; None: not
    even at 0.10.
    """

    kolmogorov_d: float
    anderson_a2: float
    doubt: float | None


def goodness_of(strengths_mpa: Sequence[float], fit: WeibullFit) -> Goodness | None:
    """None for a fit with suspended bars."""
    if fit.suspended or len(strengths_mpa) != fit.n:
        return None
    x = np.sort(np.asarray(strengths_mpa, dtype=np.float64))
    n = x.size
    power = (x / fit.scale_mpa) ** fit.modulus
    below = -np.expm1(-power)
    i = np.arange(1, n + 1)
    d = float(np.max(np.maximum(i / n - below, below - (i - 1) / n)))
    log_below = np.log(np.maximum(below, np.finfo(np.float64).tiny))
    a2 = -n - float(np.sum((2 * i - 1) * (log_below - power[::-1]))) / n
    adjusted = a2 * (1.0 + 0.2 / math.sqrt(n))
    passed = [level for level, point in A2_POINTS if adjusted > point]
    return Goodness(d, a2, min(passed) if passed else None)
