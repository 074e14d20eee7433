"""Straight lines and parabolas through samples, with what they are worth. Closed forms: the same bits every
time.

Abscissae are counted from the fit's own origin, so that a long run does not cost digits. Refuses to judge;
it answers.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from daq.stream.block import Floats

CORRELATION_MAX = 0.99


@dataclass(frozen=True, slots=True)
class Curve:
    """y = value + slope (x - origin) + bend (x - origin)^2, and its covariance for noise of unit variance.

    spread: residual standard deviation with n - terms degrees of freedom, NaN without any. thinning: how
    many times fewer independent samples there are than samples (lag-1 correlation of the residuals).
    """

    origin: float
    value: float
    slope: float
    bend: float
    covariance: tuple[tuple[float, ...], ...]
    spread: float
    thinning: float
    count: int

    @property
    def terms(self) -> int:
        return len(self.covariance)

    def at(self, x: float) -> float:
        d = x - self.origin
        return self.value + self.slope * d + self.bend * d * d

    def slope_at(self, x: float) -> float:
        return self.slope + 2.0 * self.bend * (x - self.origin)

    def u_at(self, x: float, sigma: float) -> float:
        """Standard uncertainty of the curve at x for samples of this noise, correlation regarded."""
        d = x - self.origin
        powers = np.array([1.0, d, d * d][: self.terms])
        variance = float(powers @ np.array(self.covariance) @ powers)
        return sigma * math.sqrt(max(variance, 0.0) * self.thinning)

    def u_term(self, term: int, sigma: float) -> float:
        """Standard uncertainty of one coefficient: 0 value, 1 slope, 2 bend."""
        return sigma * math.sqrt(max(self.covariance[term][term], 0.0) * self.thinning)


def fit_curve(x: Floats, y: Floats, terms: int) -> Curve:
    """Least squares with 2 (line) or 3 (parabola) terms about the mean of x. Needs as many different x as
    terms.
    """
    assert terms in (2, 3) and x.size == y.size >= terms
    origin = float(np.mean(x))
    d = x - origin
    scale = float(np.max(np.abs(d))) or 1.0
    powers = np.vstack([(d / scale) ** k for k in range(terms)])
    normal = powers @ powers.T
    inverse = np.linalg.inv(normal)
    solved = inverse @ (powers @ y)
    residual = y - solved @ powers
    shrink = np.array([scale**-k for k in range(terms)])
    coefficients = [float(c) for c in solved * shrink] + [0.0]
    covariance = inverse * np.outer(shrink, shrink)
    degrees = x.size - terms
    spread = math.sqrt(float(residual @ residual) / degrees) if degrees > 0 else float("nan")
    return Curve(
        origin=origin,
        value=coefficients[0],
        slope=coefficients[1],
        bend=coefficients[2],
        covariance=tuple(tuple(float(c) for c in row) for row in covariance),
        spread=spread,
        thinning=_thinning(residual),
        count=int(x.size),
    )


def _thinning(residual: Floats) -> float:
    """(1 + r)/(1 - r) from the lag-1 correlation r of the residuals, never below 1 (AR(1), common
    practice).
    """
    power = float(residual @ residual)
    if residual.size < 8 or power == 0.0:
        return 1.0
    correlation = min(max(float(residual[1:] @ residual[:-1]) / power, 0.0), CORRELATION_MAX)
    return (1.0 + correlation) / (1.0 - correlation)


def robust_spread(residual: Floats) -> float:
    """1.4826 times the median absolute value: the spread, whatever a few outliers do."""
    return 1.4826 * float(np.median(np.abs(residual))) if residual.size else float("nan")
