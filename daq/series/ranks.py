"""Plotting positions and line fits of a Weibull plot. An aid to the eye: estimates come from maximum
likelihood.

A line fit is only worth something with its rank formula and its direction named, so both are part of the
answer.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import Enum

import numpy as np

from daq.mechanics.quantity import Floats


class Ranks(Enum):
    """Estimators of the probability of the i-th of n; the first is the one of ASTM C1239's plots
    (from memory).
    """

    MIDPOINT = "(i-0.5)/n"
    MEAN = "i/(n+1)"
    MEDIAN = "(i-0.3)/(n+0.4)"
    NORMAL = "(i-3/8)/(n+1/4)"


class Direction(Enum):
    """Which way the line is fitted: swapping it changes m."""

    Y_ON_X = "ln ln 1/(1-P) on ln stress"
    X_ON_Y = "ln stress on ln ln 1/(1-P)"


@dataclass(frozen=True, slots=True)
class LineFit:
    """Modulus and scale of a straight line, with how it was drawn."""

    modulus: float
    scale_mpa: float
    ranks: Ranks
    direction: Direction


_SHIFTS = {
    Ranks.MIDPOINT: (0.5, 0.0),
    Ranks.MEAN: (0.0, 1.0),
    Ranks.MEDIAN: (0.3, 0.4),
    Ranks.NORMAL: (0.375, 0.25),
}


def plotting_positions(n: int, ranks: Ranks = Ranks.MIDPOINT) -> Floats:
    """P of the 1st to the n-th smallest."""
    take, add = _SHIFTS[ranks]
    places: Floats = (np.arange(1, n + 1, dtype=np.float64) - take) / (n + add)
    return places


def suspended_positions(
    stress_mpa: Sequence[float], broke: Sequence[bool], ranks: Ranks = Ranks.MIDPOINT
) -> tuple[Floats, Floats]:
    """Stresses of the broken in order and their P, suspended bars moving later ranks on (rank
    increments, C1239 form from memory): each break adds (n + 1 - last rank)/(1 + bars from here on).
    """
    order = np.argsort(np.asarray(stress_mpa, dtype=np.float64), kind="stable")
    n = len(order)
    take, add = _SHIFTS[ranks]
    rank, places, stresses = 0.0, [], []
    for passed, bar in enumerate(order):
        if broke[bar]:
            rank += (n + 1.0 - rank) / (1.0 + n - passed)
            places.append((rank - take) / (n + add))
            stresses.append(float(stress_mpa[bar]))
    return np.array(stresses), np.array(places)


def line_fit(
    strengths_mpa: Sequence[float], ranks: Ranks = Ranks.MIDPOINT, direction: Direction = Direction.Y_ON_X
) -> LineFit | None:
    """None below two different strengths."""
    x = np.log(np.sort(np.asarray(strengths_mpa, dtype=np.float64)))
    if x.size < 2 or x[0] == x[-1]:
        return None
    y = np.log(-np.log1p(-plotting_positions(x.size, ranks)))
    dx, dy = x - x.mean(), y - y.mean()
    slope = float(dx @ dy / (dx @ dx)) if direction is Direction.Y_ON_X else float(dy @ dy / (dx @ dy))
    scale_mpa = math.exp(float(x.mean()) - float(y.mean()) / slope)
    return LineFit(slope, scale_mpa, ranks, direction)
