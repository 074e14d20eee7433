"""Bounds of a Weibull fit with suspended bars, by profile likelihood: the pivots of `factors` do not hold
there.

The bound is where twice the drop of log-likelihood equals the chi-square quantile of one degree of freedom.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from daq.series.weibull import WeibullFit, fit_weibull, log_likelihood, scale_for

CHI_SQUARE = {
    0.80: 1.642374415149818,
    0.90: 2.705543454095404,
    0.95: 3.841458820694124,
}  # 1 degree of freedom
HALVINGS = 80
REACH = 64.0  # a bound is looked for within this factor of the estimate


@dataclass(frozen=True, slots=True)
class Interval:
    """Lower and upper bound; None where the data set no bound."""

    low: float | None
    high: float | None


@dataclass(frozen=True, slots=True)
class WeibullBounds:
    """Two-sided bounds of this level; method: how they were found."""

    level: float
    modulus: Interval
    scale_mpa: Interval
    method: str


def profile_bounds(
    failed_mpa: Sequence[float], suspended_mpa: Sequence[float], level: float = 0.90
) -> WeibullBounds | None:
    """None where there is no fit."""
    fit = fit_weibull(failed_mpa, suspended_mpa)
    if fit is None:
        return None
    failed = np.asarray(failed_mpa, dtype=np.float64)
    whole = np.concatenate((failed, np.asarray(suspended_mpa, dtype=np.float64)))
    floor = fit.log_likelihood - CHI_SQUARE[level] / 2.0

    def at_modulus(modulus: float) -> float:
        return log_likelihood(modulus, scale_for(modulus, whole, failed.size), failed, whole) - floor

    def at_scale(scale_mpa: float) -> float:
        return _best_at_scale(scale_mpa, fit, failed, whole) - floor

    return WeibullBounds(
        level,
        Interval(_crossing(at_modulus, fit.modulus, 1.0 / REACH), _crossing(at_modulus, fit.modulus, REACH)),
        Interval(_crossing(at_scale, fit.scale_mpa, 0.5), _crossing(at_scale, fit.scale_mpa, 2.0)),
        "profile likelihood",
    )


def _crossing(drop: Callable[[float], float], inside: float, factor: float) -> float | None:
    """Where `drop` changes sign between the estimate and a factor of it; None where it does not."""
    outside = inside * factor
    if not drop(outside) < 0.0:
        return None
    for _ in range(HALVINGS):
        middle = (inside * outside) ** 0.5
        inside, outside = (middle, outside) if drop(middle) >= 0.0 else (inside, middle)
    return inside


def _best_at_scale(scale_mpa: float, fit: WeibullFit, failed: np.ndarray, whole: np.ndarray) -> float:
    """Greatest log-likelihood over the modulus at a fixed scale: golden section, the function has one
    top in ln m.
    """
    ratio = (5.0**0.5 - 1.0) / 2.0
    low, high = np.log(fit.modulus / REACH), np.log(fit.modulus * REACH)
    left, right = high - ratio * (high - low), low + ratio * (high - low)

    def value(log_modulus: float) -> float:
        with np.errstate(over="ignore"):
            return log_likelihood(float(np.exp(log_modulus)), scale_mpa, failed, whole)

    f_left, f_right = value(left), value(right)
    for _ in range(60):
        if f_left >= f_right:
            high, right, f_right = right, left, f_left
            left = high - ratio * (high - low)
            f_left = value(left)
        else:
            low, left, f_left = left, right, f_right
            right = low + ratio * (high - low)
            f_right = value(right)
    return max(f_left, f_right)
