"""Running moments of pairs: added and merged without loss, so that a slope costs the same whatever came
before.

Pairwise update of means and centred sums (Chan, Golub and LeVeque 1983, from memory; the tests check it).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from daq.stream.block import Floats


@dataclass(frozen=True, slots=True)
class Moments:
    """Of n pairs: means, and sums of squares and products about them."""

    count: int = 0
    mean_x: float = 0.0
    mean_y: float = 0.0
    sum_xx: float = 0.0
    sum_xy: float = 0.0
    sum_yy: float = 0.0

    @property
    def slope(self) -> float:
        """dy/dx by least squares, errors in y; NaN where x does not vary."""
        return self.sum_xy / self.sum_xx if self.sum_xx > 0 else float("nan")

    @property
    def u_slope(self) -> float:
        """Standard error of `slope` from the residuals; NaN below 3 pairs."""
        if self.count < 3 or not self.sum_xx > 0:
            return float("nan")
        rest = max(self.sum_yy - self.sum_xy**2 / self.sum_xx, 0.0)
        return math.sqrt(rest / ((self.count - 2) * self.sum_xx))


def moments_of(x: Floats, y: Floats) -> Moments:
    """Moments of a batch of pairs."""
    if x.size == 0:
        return Moments()
    mean_x, mean_y = float(np.mean(x)), float(np.mean(y))
    dx, dy = x - mean_x, y - mean_y
    return Moments(x.size, mean_x, mean_y, float(dx @ dx), float(dx @ dy), float(dy @ dy))


def merge(a: Moments, b: Moments) -> Moments:
    """Moments of both batches together."""
    if a.count == 0:
        return b
    if b.count == 0:
        return a
    count = a.count + b.count
    dx, dy = b.mean_x - a.mean_x, b.mean_y - a.mean_y
    share, weight = b.count / count, a.count * b.count / count
    return Moments(
        count,
        a.mean_x + dx * share,
        a.mean_y + dy * share,
        a.sum_xx + b.sum_xx + dx * dx * weight,
        a.sum_xy + b.sum_xy + dx * dy * weight,
        a.sum_yy + b.sum_yy + dy * dy * weight,
    )
