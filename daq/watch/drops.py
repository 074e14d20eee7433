"""Slip or pop-in: what a partial drop was, told by the stiffness before and after it. Never stops anything.

The crosshead keeps its speed, so force slope stands for force over travel; the
machine's compliance is taken out before the two are compared, because a 5 % loss in the bar shows as 3.3 %
only in series with an equally stiff machine. Window for three sigma on a relative change e of the slope
(least squares, two windows): T = (216 s^2/(fs (e F')^2))^(1/3).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from math import cbrt

RESOLVE = 0.025
WINDOW_S_MIN, WINDOW_S_MAX = 0.15, 3.0
SLIP_WITHIN = 0.03
POP_IN_BELOW = 0.95


@dataclass(frozen=True, slots=True)
class Drop:
    """A partial drop waiting for its verdict. Forces net."""

    onset_s: float
    settled_s: float
    load_n: float
    drop_n: float
    slope_before_n_s: float | None
    until_s: float


@dataclass(frozen=True, slots=True)
class Told:
    """kind: one of the events slip, pop_in, partial_drop."""

    kind: str
    drop: Drop
    ratio: float | None
    why: str


def window_s(rate_hz: float, sigma_n: float, slope_n_s: float) -> float:
    wanted = cbrt(216.0 * sigma_n**2 / (rate_hz * (RESOLVE * max(slope_n_s, 1e-9)) ** 2))
    return min(max(WINDOW_S_MIN, wanted), WINDOW_S_MAX)


def slope_between(
    history: Iterable[tuple[float, float]], from_s: float, to_s: float, share: float = 0.6
) -> float | None:
    """Least-squares slope of the bins in between; None where they do not cover that share of it."""
    points = [(t, x) for t, x in history if from_s <= t <= to_s]
    if len(points) < 3 or points[-1][0] - points[0][0] < share * (to_s - from_s):
        return None
    mid_s = sum(t for t, _ in points) / len(points)
    spread = sum((t - mid_s) ** 2 for t, _ in points)
    return sum((t - mid_s) * x for t, x in points) / spread


def stiffness_ratio(
    before_n_s: float, after_n_s: float, speed_mm_s: float | None, machine_n_mm: float | None
) -> float | None:
    """Stiffness of the bar after over before, the machine taken out where it is known."""
    if before_n_s <= 0 or after_n_s <= 0:
        return None
    if speed_mm_s is None or machine_n_mm is None:
        return after_n_s / before_n_s
    before, after = before_n_s / speed_mm_s, after_n_s / speed_mm_s
    if not (before < machine_n_mm and after < machine_n_mm):
        return after_n_s / before_n_s
    return (1.0 / before - 1.0 / machine_n_mm) / (1.0 / after - 1.0 / machine_n_mm)


def tell(drop: Drop, slope_after_n_s: float | None, ratio: float | None) -> Told:
    """The verdict of a drop whose window after it has been seen (None: the break or another drop came first)."""
    if drop.slope_before_n_s is None:
        return Told("partial_drop", drop, None, "too short before it")
    if slope_after_n_s is None or ratio is None:
        return Told("partial_drop", drop, None, "too short after it")
    if abs(ratio - 1.0) <= SLIP_WITHIN:
        return Told("slip", drop, ratio, "")
    if ratio <= POP_IN_BELOW:
        return Told("pop_in", drop, ratio, "")
    return Told("partial_drop", drop, ratio, "between slip and pop-in")
