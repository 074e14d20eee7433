"""The crosshead: speed orders, ramps, latencies, a force loop, end switches. Exact between changes; no wire.

Positive is towards the bar. Between two changes the acceleration is constant (or the force loop holds), so
positions are closed forms of the time since the last change, and any cut of the time gives the same.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from daq.mechanics.quantity import Floats
from simulator.law import Law

NEVER = math.inf
NEAR_MM = 1e-9  # closer than this to its goal the crosshead is there; far below any sensor's count


@dataclass(frozen=True, slots=True)
class Run:
    """Run at a speed until told otherwise, or until a position. Negative: away from the bar."""

    speed_mm_s: float
    goal_mm: float | None = None


@dataclass(frozen=True, slots=True)
class Halt:
    """Come to rest. at_once: no ramp (a switch or the drive itself cuts the motion)."""

    at_once: bool = False


Order: TypeAlias = Run | Halt


@dataclass(frozen=True, slots=True)
class _Follow:
    """The machine's force loop: force rises at a constant rate along this law."""

    force_n: float
    rate_n_s: float
    law: Law

    def positions(self, after_s: Floats) -> Floats:
        return self.law.position(self.force_n + self.rate_n_s * after_s)


class Crosshead:
    """Give orders with the time at which they take effect; move to the times that `next_change_s` names."""

    def __init__(self, *, acceleration_mm_s2: float | None, end_up_mm: float, end_down_mm: float) -> None:
        self._ramp = acceleration_mm_s2
        self._ends_mm = (end_up_mm, end_down_mm)
        self._since_s = 0.0
        self._from_mm = 0.0
        self._from_mm_s = 0.0
        self._gain_mm_s2 = 0.0
        self._target_mm_s = 0.0
        self._goal_mm: float | None = None
        self._follow: _Follow | None = None
        self._pending: list[tuple[float, Order]] = []

    # --- where it is ------------------------------------------------------------------------------
    def positions(self, times_s: Floats) -> Floats:
        """Positions at times since the last change."""
        after_s = times_s - self._since_s
        if self._follow is not None:
            return self._follow.positions(after_s)
        if self._gain_mm_s2 == 0.0:
            return self._from_mm + self._from_mm_s * after_s
        return self._from_mm + after_s * (self._from_mm_s + self._gain_mm_s2 / 2 * after_s)

    def position_at(self, now_s: float) -> float:
        return float(self.positions(np.array([now_s]))[0])

    def speed_at(self, now_s: float) -> float:
        """mm/s."""
        if self._follow is not None:
            slope = self._follow.law.slope_at(self.position_at(now_s))
            return self._follow.rate_n_s / slope if slope > 0 else 0.0
        return self._from_mm_s + self._gain_mm_s2 * (now_s - self._since_s)

    @property
    def moving(self) -> bool:
        return self._follow is not None or self._from_mm_s != 0.0 or self._gain_mm_s2 != 0.0

    @property
    def following(self) -> bool:
        return self._follow is not None

    @property
    def halting(self) -> bool:
        """A Halt was given that has not taken effect yet."""
        return any(isinstance(order, Halt) for _, order in self._pending)

    def reaches_s(self, position_mm: float) -> float:
        """When it comes to a position, moving towards the bar; never where the present motion does not."""
        if self._follow is not None:
            rise_n = self._follow.law.force_at(position_mm) - self._follow.force_n
            return self._since_s + rise_n / self._follow.rate_n_s if self._follow.rate_n_s > 0 else NEVER
        distance_mm = position_mm - self._from_mm
        if distance_mm < 0 or (self._from_mm_s <= 0 and self._gain_mm_s2 <= 0):
            return NEVER
        return self._since_s + _time_over(distance_mm, self._from_mm_s, self._gain_mm_s2)

    # --- what it is told --------------------------------------------------------------------------
    def order(self, effective_s: float, order: Order) -> None:
        """A Halt drops every Run that has not begun; a Run takes effect after every Halt given before it."""
        if isinstance(order, Halt):
            self._pending = [(t, o) for t, o in self._pending if isinstance(o, Halt)]
        elif self._pending:
            effective_s = max(effective_s, self._pending[-1][0])
        self._pending.append((effective_s, order))
        self._pending.sort(key=lambda item: item[0])

    def follow(self, now_s: float, force_n: float, rate_n_s: float, law: Law) -> None:
        """The force loop takes over; a Run that has not begun is dropped."""
        self._rebase(now_s)
        self._pending = [(t, o) for t, o in self._pending if isinstance(o, Halt)]
        self._follow = _Follow(force_n, rate_n_s, law)

    def release(self, now_s: float) -> None:
        """The force loop has lost its bar: the crosshead runs on at the speed it has."""
        if self._follow is not None:
            self._rebase(now_s)
            self._gain_mm_s2, self._target_mm_s = 0.0, self._from_mm_s

    def next_change_s(self) -> float:
        """The next moment at which the motion changes by itself or by a pending order."""
        pending_s = self._pending[0][0] if self._pending else NEVER
        return min(pending_s, self._ramp_ends_s(), self._brakes_s(), self._end_s())

    def change(self, now_s: float) -> None:
        """Do what is due at this moment, which `next_change_s` named."""
        ramp_ended, brake = self._ramp_ends_s() <= now_s, self._brakes_s() <= now_s
        end = self._end_s() <= now_s
        self._rebase(now_s)
        if ramp_ended:
            self._settle()
        if brake:
            self._aim(0.0)
            self._snap()
        if end:
            self._cut()
        while self._pending and self._pending[0][0] <= now_s:
            self._begin(self._pending.pop(0)[1])

    def at_end(self, now_s: float) -> tuple[bool, bool]:
        """(upper, lower) end switch pressed."""
        position_mm = self.position_at(now_s)
        return position_mm <= self._ends_mm[0] + NEAR_MM, position_mm >= self._ends_mm[1] - NEAR_MM

    # --- inside -----------------------------------------------------------------------------------
    def _rebase(self, now_s: float) -> None:
        position_mm, speed_mm_s = self.position_at(now_s), self.speed_at(now_s)
        self._follow = None
        self._since_s, self._from_mm, self._from_mm_s = now_s, position_mm, speed_mm_s

    def _begin(self, order: Order) -> None:
        if isinstance(order, Halt):
            self._goal_mm = None
            if order.at_once:
                self._cut()
            else:
                self._aim(0.0)
            return
        up, down = self.at_end(self._since_s)
        if (order.speed_mm_s > 0 and down) or (order.speed_mm_s < 0 and up):
            return
        self._goal_mm = order.goal_mm
        self._aim(order.speed_mm_s)

    def _aim(self, speed_mm_s: float) -> None:
        self._target_mm_s = speed_mm_s
        if self._ramp is None or speed_mm_s == self._from_mm_s:
            self._from_mm_s, self._gain_mm_s2 = speed_mm_s, 0.0
        else:
            self._gain_mm_s2 = math.copysign(self._ramp, speed_mm_s - self._from_mm_s)

    def _settle(self) -> None:
        self._from_mm_s, self._gain_mm_s2 = self._target_mm_s, 0.0
        if self._target_mm_s == 0.0:
            self._snap()

    def _snap(self) -> None:
        if self._goal_mm is not None and abs(self._goal_mm - self._from_mm) < 1e-6:
            self._from_mm, self._goal_mm = self._goal_mm, None
            self._cut()

    def _cut(self) -> None:
        self._from_mm_s = self._gain_mm_s2 = self._target_mm_s = 0.0
        self._goal_mm = None

    def _ramp_ends_s(self) -> float:
        if self._gain_mm_s2 == 0.0 or self._follow is not None:
            return NEVER
        return self._since_s + (self._target_mm_s - self._from_mm_s) / self._gain_mm_s2

    def _brakes_s(self) -> float:
        """When it must begin to brake so as to rest at its goal."""
        if self._goal_mm is None or self._target_mm_s == 0.0:
            return NEVER
        way = math.copysign(1.0, self._target_mm_s)
        left_mm = (self._goal_mm - self._from_mm) * way
        speed, gain = self._from_mm_s * way, self._gain_mm_s2 * way
        if self._ramp is None:
            return self._since_s + max(left_mm, 0.0) / speed
        if left_mm <= speed**2 / (2 * self._ramp):
            return self._since_s
        if gain == 0.0:
            return self._since_s + (left_mm - speed**2 / (2 * self._ramp)) / speed
        # ramping up at a: v t + a t^2/2 + (v + a t)^2/(2 a) = left
        return self._since_s + (math.sqrt(max(speed**2 / 2 + gain * left_mm, 0.0)) - speed) / gain

    def _end_s(self) -> float:
        """When it runs into an end switch."""
        up_mm, down_mm = self._ends_mm
        if self._follow is not None:
            return self.reaches_s(down_mm)
        if not self.moving:
            return NEVER
        down_s = _time_over(down_mm - self._from_mm, self._from_mm_s, self._gain_mm_s2)
        up_s = _time_over(self._from_mm - up_mm, -self._from_mm_s, -self._gain_mm_s2)
        return self._since_s + min(down_s, up_s)


def _time_over(distance: float, speed: float, gain: float) -> float:
    """The first time >= 0 at which speed t + gain t^2/2 = distance, coming from below; or never."""
    if distance < 0:
        return NEVER
    if gain == 0.0:
        return distance / speed if speed > 0 else NEVER
    square = speed**2 + 2 * gain * distance
    if square < 0:
        return NEVER
    root = math.sqrt(square)
    bottom = speed + root
    if bottom > 0 and (gain > 0 or speed > 0):
        return 2 * distance / bottom
    return NEVER
