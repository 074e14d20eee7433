"""Pace: the loading rate while loading: out of its band, interrupted, or not what the plan says.

Rows 23 and 24 of the limits. Tells, and, where the method lets midspan close the loop,
says which speed would give the wanted rate. Slopes are taken over half a second, ten times a second at most.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

from daq.watch.drops import slope_between

WINDOW_S, EVERY_S = 0.5, 0.1
OUT_S = 1.0
STEP_SHARE = 0.25
SIGMA = 4.0
LOOP_EVERY_S = 0.5
LOOP_FACTOR_MAX = 1.25
LOOP_DEADBAND = 0.02


@dataclass(frozen=True, slots=True)
class Told:
    """event: rate_out_of_band or rate_interrupted."""

    event: str
    rate_n_s: float
    wanted_n_s: float
    lasted_s: float


class Pace:
    """Watches the slope of the force between seating and the break."""

    __slots__ = (
        "_due_s",
        "_error_n_s",
        "_jump_since_s",
        "_loop_due_s",
        "_out_since_s",
        "_steady_n_s",
        "_told",
        "rate_n_s",
        "tolerance",
        "wanted_n_s",
    )

    def __init__(self, wanted_n_s: float | None, tolerance: float, sigma_n: float, rate_hz: float) -> None:
        """wanted_n_s None: the crosshead speed is what is held, so only interruptions are told."""
        self.wanted_n_s, self.tolerance = wanted_n_s, tolerance
        samples = max(3.0, WINDOW_S * rate_hz)
        self._error_n_s = sigma_n * (12.0 / samples**3) ** 0.5 * rate_hz
        self.rate_n_s: float | None = None
        self._due_s = self._loop_due_s = float("-inf")
        self._out_since_s: float | None = None
        self._jump_since_s: float | None = None
        self._steady_n_s: float | None = None
        self._told: set[str] = set()

    def judge(self, now_s: float, smooth_since_s: float, history: deque[tuple[float, float]]) -> Told | None:
        """smooth_since_s: nothing before this counts (a drop, or the start of loading)."""
        if now_s < self._due_s or now_s - smooth_since_s < WINDOW_S:
            return None
        self._due_s = now_s + EVERY_S
        slope = slope_between(history, now_s - WINDOW_S, now_s)
        if slope is None:
            return None
        self.rate_n_s = slope
        return self._band(now_s, slope) or self._jump(now_s, slope)

    def speed_factor(self, now_s: float) -> float | None:
        """By how much the speed should change for the wanted rate; None: not now."""
        if self.wanted_n_s is None or self.rate_n_s is None or now_s < self._loop_due_s or self.rate_n_s <= 0:
            return None
        self._loop_due_s = now_s + LOOP_EVERY_S
        factor = self.wanted_n_s / self.rate_n_s
        if abs(factor - 1.0) < LOOP_DEADBAND:
            return None
        return min(max(factor, 1.0 / LOOP_FACTOR_MAX), LOOP_FACTOR_MAX)

    def _band(self, now_s: float, slope: float) -> Told | None:
        wanted = self.wanted_n_s
        if wanted is None or abs(slope - wanted) <= self.tolerance * wanted + SIGMA * self._error_n_s:
            self._out_since_s = None
            return None
        if self._out_since_s is None:
            self._out_since_s = now_s
        lasted_s = now_s - self._out_since_s
        return self._once("rate_out_of_band", slope, wanted, lasted_s) if lasted_s >= OUT_S else None

    def _jump(self, now_s: float, slope: float) -> Told | None:
        """A step of more than a quarter against the slow mean: a hiccup of the drive, or a hold."""
        steady = self._steady_n_s
        if steady is None:
            self._steady_n_s = slope
            return None
        if abs(slope - steady) <= STEP_SHARE * abs(steady) + SIGMA * self._error_n_s:
            lasted_s = now_s - self._jump_since_s if self._jump_since_s is not None else 0.0
            interrupted = self._jump_since_s is not None
            self._jump_since_s = None
            self._steady_n_s = steady + 0.1 * (slope - steady)
            return self._once("rate_interrupted", slope, steady, lasted_s) if interrupted else None
        if self._jump_since_s is None:
            self._jump_since_s = now_s - WINDOW_S
        return None

    def _once(self, event: str, slope: float, wanted: float, lasted_s: float) -> Told | None:
        if event in self._told:
            return None
        self._told.add(event)
        return Told(event, slope, wanted, lasted_s)
