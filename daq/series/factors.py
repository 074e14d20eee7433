"""Unbiasing factors and pivotal bounds of maximum-likelihood Weibull estimates from complete samples.

Source: our own simulation (1,000,000 samples a row, 400,000 from n = 40 on; three million for the unbiasing
factors of n = 5, 10, 20, 30), in agreement with an independent simulation within its noise. The table printed in
ASTM C1239 comes from a smaller, older simulation and lies 0.002 to 0.007 above these factors. Not for
suspended bars: use `profile`. Between rows: (value - 1) sqrt(n), t sqrt(n) and (1 - factor) n go straight in
1/n; beyond n = 120 they stay.
"""

from __future__ import annotations

import math
from types import MappingProxyType

import numpy as np

from daq.series.profile import Interval, WeibullBounds
from daq.series.weibull import WeibullFit

N_MIN = 5  # fewer bars: no Weibull at all, the mean only (trade judgement, no source)
# n: (unbiasing factor of m, quantiles of m_hat/m, quantiles of m_hat ln(s_hat/s)); quantiles at QUANTILES
QUANTILES = (0.025, 0.05, 0.10, 0.90, 0.95, 0.975)
TABLE = MappingProxyType({
    5: (0.6937, (0.617, 0.682, 0.769, 2.299, 2.841, 3.465), (-1.640, -1.240, -0.884, 0.779, 1.101, 1.435)),
    6: (0.7491, (0.635, 0.696, 0.776, 2.038, 2.436, 2.876), (-1.321, -1.023, -0.746, 0.675, 0.936, 1.205)),
    7: (0.7880, (0.652, 0.709, 0.784, 1.873, 2.193, 2.537), (-1.124, -0.888, -0.659, 0.603, 0.828, 1.052)),
    8: (0.8165, (0.666, 0.720, 0.790, 1.758, 2.027, 2.305), (-0.991, -0.790, -0.593, 0.552, 0.751, 0.946)),
    9: (0.8379, (0.677, 0.729, 0.797, 1.676, 1.909, 2.148), (-0.891, -0.719, -0.544, 0.510, 0.690, 0.862)),
    10: (0.8549, (0.688, 0.739, 0.802, 1.610, 1.816, 2.027), (-0.822, -0.665, -0.506, 0.478, 0.642, 0.800)),
    12: (0.8803, (0.706, 0.753, 0.812, 1.519, 1.690, 1.861), (-0.714, -0.583, -0.447, 0.427, 0.570, 0.705)),
    15: (0.9051, (0.727, 0.770, 0.824, 1.432, 1.569, 1.705), (-0.613, -0.504, -0.389, 0.374, 0.496, 0.609)),
    18: (0.9212, (0.745, 0.785, 0.835, 1.373, 1.490, 1.603), (-0.544, -0.449, -0.348, 0.337, 0.447, 0.546)),
    20: (0.9295, (0.754, 0.793, 0.841, 1.344, 1.450, 1.552), (-0.509, -0.422, -0.328, 0.318, 0.419, 0.510)),
    24: (0.9413, (0.770, 0.806, 0.850, 1.302, 1.394, 1.481), (-0.455, -0.379, -0.295, 0.288, 0.378, 0.460)),
    30: (0.9533, (0.789, 0.822, 0.862, 1.258, 1.335, 1.408), (-0.401, -0.335, -0.260, 0.255, 0.334, 0.404)),
    40: (0.9650, (0.811, 0.841, 0.876, 1.211, 1.275, 1.334), (-0.341, -0.284, -0.221, 0.219, 0.286, 0.346)),
    50: (0.9724, (0.826, 0.854, 0.887, 1.182, 1.236, 1.286), (-0.301, -0.252, -0.197, 0.194, 0.253, 0.306)),
    60: (0.9770, (0.839, 0.864, 0.894, 1.163, 1.211, 1.255), (-0.273, -0.229, -0.179, 0.177, 0.230, 0.276)),
    80: (0.9825, (0.857, 0.880, 0.906, 1.136, 1.176, 1.212), (-0.234, -0.197, -0.154, 0.153, 0.198, 0.238)),
    100: (0.9862, (0.870, 0.890, 0.915, 1.119, 1.154, 1.185), (-0.209, -0.176, -0.138, 0.136, 0.176, 0.211)),
    120: (0.9885, (0.880, 0.899, 0.921, 1.107, 1.138, 1.166), (-0.190, -0.160, -0.125, 0.124, 0.160, 0.193)),
})  # fmt: skip
LEVELS = MappingProxyType(
    {0.95: (0, 5), 0.90: (1, 4), 0.80: (2, 3)}
)  # two-sided level: places of its quantiles


def unbiasing_factor(n: int) -> float | None:
    """Multiply the estimated modulus by this; None below 5 bars."""
    if n < N_MIN:
        return None
    return 1.0 - _between([(1.0 - row[0]) * size for size, row in TABLE.items()], n) / n


def unbiased_modulus(fit: WeibullFit) -> float | None:
    """None below 5 bars, and with suspended bars: the factors are not theirs."""
    factor = None if fit.suspended else unbiasing_factor(fit.n)
    return None if factor is None else factor * fit.modulus


def pivot_q(n: int, place: int) -> float:
    """Quantile of m_hat/m."""
    root = math.sqrt(n)
    return 1.0 + _between([(row[1][place] - 1.0) * math.sqrt(size) for size, row in TABLE.items()], n) / root


def pivot_t(n: int, place: int) -> float:
    """Quantile of m_hat ln(s_hat/s)."""
    return _between([row[2][place] * math.sqrt(size) for size, row in TABLE.items()], n) / math.sqrt(n)


def _between(values: list[float], n: int) -> float:
    """Straight in 1/n between the rows; the last row's value beyond it."""
    inverse = [1.0 / size for size in TABLE]
    return float(np.interp(1.0 / n, inverse[::-1], values[::-1]))


def pivotal_bounds(fit: WeibullFit, level: float = 0.90) -> WeibullBounds | None:
    """m in [m_hat/q_hi, m_hat/q_lo], s in [s_hat exp(-t_hi/m_hat), s_hat exp(-t_lo/m_hat)].

    None below 5 bars and with suspended bars.
    """
    if fit.suspended or fit.n < N_MIN:
        return None
    low, high = LEVELS[level]
    m, s = fit.modulus, fit.scale_mpa
    return WeibullBounds(
        level,
        Interval(m / pivot_q(fit.n, high), m / pivot_q(fit.n, low)),
        Interval(s * math.exp(-pivot_t(fit.n, high) / m), s * math.exp(-pivot_t(fit.n, low) / m)),
        "pivotal quantities",
    )


def modulus_range(n: int, level: float = 0.95) -> tuple[float, float] | None:
    """What n bars buy: bounds of m over its estimate; None below 5. For planning, and for `how many more`."""
    if n < N_MIN:
        return None
    low, high = LEVELS[level]
    return 1.0 / pivot_q(n, high), 1.0 / pivot_q(n, low)
