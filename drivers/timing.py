"""Sample times on the bench's monotonic clock, by the best means the card gives. Reads no clock: arrivals
are given.

Counter: the sample number is tied to arrivals by daq.stream.clock. Device time: its offset is the smallest
delay seen lately. Neither: arrival less transmission, earlier rows of the same chunk one nominal period
apart.
Times of one source always strictly increase.
"""

from __future__ import annotations

from collections import deque
from typing import Protocol

import numpy as np

from daq.cards.frame import Link
from daq.stream.block import Floats
from daq.stream.clock import ClockModel
from drivers.plan import RowPlan

STEP_S = 1e-9
"""Smallest step between two samples; far below any period, far above the resolution of a float of a day's
seconds."""

ENVELOPE_S = 30
"""Delays are compared over this many seconds: a device clock 50 ppm off is then followed within 1.5 ms."""

LEAP_S = 1.0
"""No arrival can suddenly be this much less late than all others: then the device time leapt."""


class Timing(Protocol):
    """Carried state of one source."""

    def feed(self, first_index: int, device_s: Floats | None, count: int, arrival_s: float) -> Floats:
        """Times of `count` consecutive samples, of which the last arrived at arrival_s (transmission taken
        off)."""
        ...

    def restart(self) -> None:
        """The sample numbers no longer follow the ones before."""
        ...


class CounterTiming:
    """A device counter, tied to the arrivals by the stream's clock model."""

    def __init__(self, period_s: float) -> None:
        self.clock = ClockModel()
        self._period_s = period_s
        self._last_s = -np.inf

    def feed(self, first_index: int, device_s: Floats | None, count: int, arrival_s: float) -> Floats:
        time_s = self.clock.feed(first_index, count, arrival_s, self._period_s)
        if not time_s[0] > self._last_s:
            time_s = rising(time_s, self._last_s)
        self._last_s = float(time_s[-1])
        return time_s

    def restart(self) -> None:
        self.clock = ClockModel()


class ArrivalTiming:
    """No counter, no device time."""

    def __init__(self, period_s: float) -> None:
        self._period_s = period_s
        self._last_s = -np.inf

    def feed(self, first_index: int, device_s: Floats | None, count: int, arrival_s: float) -> Floats:
        last_s = self._last_s
        if count == 1:
            self._last_s = arrival_s if arrival_s > last_s else last_s + STEP_S
            return np.array([self._last_s])
        time_s = arrival_s - self._period_s * np.arange(count - 1.0, -1.0, -1.0)
        if not time_s[0] > last_s:
            step_s = (arrival_s - last_s) / (count + 1)
            if step_s > STEP_S:
                time_s = arrival_s - step_s * np.arange(count - 1.0, -1.0, -1.0)
            else:
                time_s = rising(time_s, last_s)
        self._last_s = float(time_s[-1])
        return time_s

    def restart(self) -> None:
        return  # an arrival stands for itself


class DeviceTiming:
    """A device time column. A step back of the device time, or a leap ahead of all arrivals (a restart, a
    damaged row), starts the envelope afresh; no sample is ever later than its arrival."""

    def __init__(self) -> None:
        self._last_s = -np.inf
        self._last_device_s = -np.inf
        self._delays: deque[tuple[int, float]] = deque(maxlen=ENVELOPE_S)

    def feed(self, first_index: int, device_s: Floats | None, count: int, arrival_s: float) -> Floats:
        assert device_s is not None
        newest_s = float(device_s[-1])
        delay_s = arrival_s - newest_s
        if newest_s < self._last_device_s or (self._delays and delay_s < self._offset_s() - LEAP_S):
            self._delays.clear()
        self._last_device_s = newest_s
        self._note(delay_s, int(arrival_s))
        time_s = rising(np.minimum(device_s + self._offset_s(), arrival_s), self._last_s)
        self._last_s = float(time_s[-1])
        return time_s

    def restart(self) -> None:
        return  # the device time itself shows it

    def _offset_s(self) -> float:
        return min(delay_s for _, delay_s in self._delays)

    def _note(self, delay_s: float, second: int) -> None:
        while self._delays and self._delays[0][0] <= second - ENVELOPE_S:
            self._delays.popleft()
        if self._delays and self._delays[-1][0] == second:
            delay_s = min(delay_s, self._delays.pop()[1])
        self._delays.append((second, delay_s))


def rising(time_s: Floats, after_s: float) -> Floats:
    """The same times, each at least STEP_S above the one before; untouched where they already are."""
    count = len(time_s)
    if count == 1:
        return time_s if time_s[0] > after_s else np.array([after_s + STEP_S])
    if time_s[0] > after_s and (np.diff(time_s) > 0.0).all():
        return time_s
    ramp = STEP_S * np.arange(count, dtype=np.float64)
    flat = time_s - ramp
    flat[0] = max(flat[0], after_s + STEP_S)
    risen: Floats = np.maximum.accumulate(flat) + ramp
    return risen


def timing_for(plan: RowPlan, link: Link) -> Timing:
    """The best timing the card allows: counter, else device time, else arrival."""
    if plan.counter is None and plan.time is not None:
        return DeviceTiming()
    period_s = 1.0 / link.rate_hz
    return ArrivalTiming(period_s) if plan.counter is None else CounterTiming(period_s)
