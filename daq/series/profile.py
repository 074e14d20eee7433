"""Bounds of a Weibull fit with suspended bars, by profile likelihood: the pivots of `factors` do not hold
there.

The bound is where twice the drop of log-likelihood equals the chi-square quantile of one degree of freedom.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats
from daq.series.weibull import WeibullFit, fit_weibull, log_likelihood, scale_for

CHI_SQUARE = {
    0.80: 1.642374415149818,
    0.90: 2.705543454095404,
    0.95: 3.841458820694124,
}  # 1 degree of freedom
REACH = 64.0  # a bound is looked for within this factor of the estimate
FIRST_STEP = 0.05  # of ln: doubled until the bound is bracketed
STEPS_MAX = 80
CLOSE = 1e-9  # of ln bound, and of log-likelihood
EXACT = 1e-12


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
        Interval(_crossing(at_modulus, fit.modulus, -1.0), _crossing(at_modulus, fit.modulus, 1.0)),
        Interval(_crossing(at_scale, fit.scale_mpa, -1.0), _crossing(at_scale, fit.scale_mpa, 1.0)),
        "profile likelihood",
    )


def _crossing(drop: Callable[[float], float], estimate: float, side: float) -> float | None:
    """Where `drop` falls below zero on one side of the estimate; None where it does not within REACH.

    Steps out until it is bracketed, then regula falsi (Illinois) on the logarithm.
    """
    inside, at_inside, step = math.log(estimate), drop(estimate), FIRST_STEP
    while True:
        outside = math.log(estimate) + side * min(step, math.log(REACH))
        at_outside = drop(math.exp(outside))
        if at_outside < 0.0:
            break
        if step >= math.log(REACH):
            return None
        inside, at_inside, step = outside, at_outside, 2.0 * step
    for _ in range(STEPS_MAX):
        middle = outside - at_outside * (outside - inside) / (at_outside - at_inside)
        at_middle = drop(math.exp(middle))
        if abs(at_middle) < CLOSE or abs(outside - inside) < CLOSE:
            return math.exp(middle)
        if at_middle < 0.0:
            outside, at_outside, at_inside = middle, at_middle, at_inside / 2.0
        else:
            inside, at_inside, at_outside = middle, at_middle, at_outside / 2.0
    return math.exp(middle)


def _best_at_scale(scale_mpa: float, fit: WeibullFit, failed: Floats, whole: Floats) -> float:
    """Greatest log-likelihood over the modulus at a fixed scale. Its slope r/m + sum ln(x/s) of the broken -
    sum (x/s)^m ln(x/s) falls with m: Newton, kept positive.
    """
    logs = np.log(whole / scale_mpa)
    broken = float(np.sum(logs[: failed.size]))
    modulus = fit.modulus
    for _ in range(STEPS_MAX):
        with np.errstate(over="ignore"):
            weight = np.exp(np.minimum(modulus * logs, 600.0))
        slope = failed.size / modulus + broken - float(weight @ logs)
        bend = failed.size / modulus**2 + float(weight @ (logs * logs))
        after = max(modulus + slope / bend, modulus / 2.0)
        if abs(after - modulus) <= EXACT * modulus:
            break
        modulus = after
    with np.errstate(over="ignore"):
        return log_likelihood(modulus, scale_mpa, failed, whole)
