"""Candidate: an open question about the force. Holds the samples since the first that lay outside, decides nothing.

Everything is measured against the line as it stood when the question was opened. Falls are measured against the level
then (`reference`), not against the line carried on: a line that was climbing fast when the crosshead stopped would
otherwise turn the halt itself into a fall.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import sqrt

from daq.watch.noise import Level

INFINITE = float("inf")
SAMPLES_MIN = 3
AWAY_SAMPLES, AWAY_SHARE = 4, 0.75
DULL_SAMPLES, DULL_SIGMA = 8, 0.05
NEGATIVE_SHARE, NEGATIVE_SIGMA = 0.2, 20.0
MIRROR_LIMITS = 3.0
FALLING_ERRORS = 3.0


@dataclass(frozen=True, slots=True)
class Rest:
    """What the signal looks like at rest: a converter too coarse to show noise is not a dead one."""

    low: float = INFINITE
    high: float = -INFINITE
    dull: bool = False
    step: float = 0.0


@dataclass(frozen=True, slots=True)
class Tail:
    """A line through the last three fifths of a candidate. step: how far it lies below the forecast at the onset."""

    step: float
    falling: bool


class Candidate:
    """Samples since something began, with the sums of the last confirm window."""

    __slots__ = (
        "_all_low",
        "_all_near",
        "_all_sum",
        "_at_n",
        "_low_n",
        "_origin_s",
        "_window_s",
        "decide_s",
        "head",
        "last_good_index",
        "last_good_s",
        "limit",
        "low",
        "lows",
        "near",
        "nears",
        "reference",
        "sigma_n",
        "slope_n_s",
        "sum",
        "times_s",
        "values",
    )

    def __init__(
        self, level: Level, limit: float, good: tuple[float, int], share: float, window_s: float
    ) -> None:
        """good: time and index of the last accepted sample. share: below this part of the reference is low."""
        self._at_n, self.slope_n_s, self._origin_s = level.at_n, level.slope_n_s, level.origin_s
        self.sigma_n, self.limit, self._window_s = level.sigma_n, limit, window_s
        self.last_good_s, self.last_good_index = good
        newest = level.newest_n
        forecast = self.forecast(self.last_good_s)
        self.reference = forecast if newest is None else min(forecast, newest)
        self._low_n = share * self.reference
        self.times_s: list[float] = []
        self.values: list[float] = []
        self.lows: list[bool] = []
        self.nears: list[bool] = []
        self.head = self.low = self.near = self._all_low = self._all_near = 0
        self.sum = self._all_sum = 0.0
        self.decide_s = -INFINITE

    def forecast(self, time_s: float) -> float:
        return self._at_n + self.slope_n_s * (time_s - self._origin_s)

    @property
    def window(self) -> int:
        """Samples in the last confirm window."""
        return len(self.values) - self.head

    @property
    def mean(self) -> float:
        """Mean of the last confirm window."""
        return self.sum / (len(self.values) - self.head)

    @property
    def low_n(self) -> float:
        return self._low_n

    def add(self, time_s: float, value: float) -> None:
        """Take a sample and keep the sums of the last window, which has at least three samples."""
        off = value - (self._at_n + self.slope_n_s * (time_s - self._origin_s))
        low, near = value < self._low_n, -self.limit <= 2.0 * off <= self.limit
        self.times_s.append(time_s)
        self.values.append(value)
        self.lows.append(low)
        self.nears.append(near)
        self.sum += value
        self.low += low
        self.near += near
        self._all_sum += value
        self._all_low += low
        self._all_near += near
        oldest_s, head, count = time_s - self._window_s, self.head, len(self.values)
        while count - head > SAMPLES_MIN and self.times_s[head] <= oldest_s:
            self.sum -= self.values[head]
            self.low -= self.lows[head]
            self.near -= self.nears[head]
            head += 1
        self.head = head

    def stays_away(self) -> bool:
        """Not one sample came back near the forecast, and taken together they are low: no glitch looks like that."""
        count, newest = len(self.values), self.values[-1]
        if self._all_near or count < AWAY_SAMPLES or newest >= AWAY_SHARE * self.reference:
            return False
        return 2 * self._all_low >= count and self._all_sum < self._low_n * count

    def drop(self) -> float:
        """How far the last window's mean lies below the forecast at its middle."""
        return self.forecast(0.5 * (self.times_s[self.head] + self.times_s[-1])) - self.mean

    def off(self) -> list[float]:
        return [x - self.forecast(t) for t, x in zip(self.times_s, self.values, strict=True)]

    def first_dropped(self) -> int:
        """Place of the first sample below the threshold; 0 where the candidate began with a kink upward."""
        return next((place for place, off in enumerate(self.off()) if off < -self.limit), 0)

    def first_low_s(self) -> float:
        """When it first was low; the newest time if it never was."""
        return next((t for t, low in zip(self.times_s, self.lows, strict=True) if low), self.times_s[-1])

    def tail_start(self) -> int:
        """Where the last three fifths begin (never fewer than the last window)."""
        return min(self.head, len(self.values) * 2 // 5)

    def tail_samples(self) -> tuple[list[float], list[float]]:
        """The last three fifths without what stands alone among its neighbours: a glitch that falls into a slip
        must not bend the line that goes on from there.
        """
        start, values = self.tail_start(), self.values
        steps = [abs(b - a) for a, b in pairwise(values[start:])]
        limit = self.limit + 2.0 * _middle(
            steps
        )  # a steep ramp's last sample is far from its neighbours, too
        near: Sequence[int] = [
            place
            for place in range(start, len(values))
            if abs(values[place] - _middle(values[max(0, place - 2) : place + 3])) <= limit
        ]
        kept = (
            near if len(near) >= max(SAMPLES_MIN, (len(values) - start) // 2) else range(start, len(values))
        )
        return [self.times_s[place] for place in kept], [values[place] for place in kept]

    def tail(self) -> Tail:
        """What the samples do now, after whatever happened: a step, or a fall that still goes on."""
        times, values = self.tail_samples()
        n = len(values)
        mid_s, mid = sum(times) / n, sum(values) / n
        spread = sum((t - mid_s) ** 2 for t in times)
        slope = sum((t - mid_s) * x for t, x in zip(times, values, strict=True)) / spread
        onset_s = self.times_s[0]
        step = self.forecast(onset_s) - (mid + slope * (onset_s - mid_s))
        return Tail(step, slope < -FALLING_ERRORS * self.sigma_n / sqrt(spread))

    def dull(self, rest: Rest, sigma_rest: float) -> bool:
        """Constant, or far quieter than the signal at rest: no break looks like that, a dead signal does."""
        window = self.values[self.head :]
        low, high = min(window), max(window)
        quiet = len(window) >= DULL_SAMPLES and high - low <= DULL_SIGMA * sigma_rest
        if low != high and not quiet:
            return False
        return not (rest.dull and rest.low - rest.step <= low and high <= rest.high + rest.step)

    def negative(self) -> bool:
        """Well below zero, newest and altogether: a ring-down swings about what is left on the bar."""
        level = -max(NEGATIVE_SHARE * self.reference, NEGATIVE_SIGMA * self.sigma_n)
        return self.mean < level and self._all_sum < level * len(self.values)

    def mirrored(self) -> bool:
        """The forecast with the other sign: a change of polarity, which no bar makes."""
        first = self.first_dropped()
        pairs = zip(self.times_s[first:], self.values[first:], strict=True)
        return all(abs(x + self.forecast(t)) <= MIRROR_LIMITS * self.limit for t, x in pairs)


def _middle(values: list[float]) -> float:
    return sorted(values)[len(values) // 2]
