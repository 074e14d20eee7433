"""Repeats: how many raw values in a row are identical. A dead signal repeats itself; a coarse one does, too."""

from __future__ import annotations

from math import ceil, erf, log, sqrt

import numpy as np

from daq.stream.block import Floats

FROZEN_PROBABILITY = 1e-6  # trade judgement, no source
ALWAYS_STILL = 0.999


def repeat_probability(step: float, sigma: float) -> float:
    """That a value with Gaussian noise, counted in such steps, is the same again; its mean in the middle of a count,
    where it moves least.
    """
    if not step > 0:
        return 0.0
    if not sigma > 0:
        return 1.0
    width = step / (sigma * sqrt(2.0))
    inner = erf(0.5 * width)
    total, k = inner * inner, 1
    while inner < 1.0 - 1e-9 and k < 100:
        outer = erf((k + 0.5) * width)
        total, inner, k = total + 2.0 * (0.5 * (outer - inner)) ** 2, outer, k + 1
    return total


def still_samples(step: float, sigma: float) -> int | None:
    """How many identical values in a row come by chance less than once in a million; None: any number may."""
    likely = repeat_probability(step, sigma)
    if likely > ALWAYS_STILL:
        return None
    return ceil(log(FROZEN_PROBABILITY) / log(max(likely, 1e-3)))


class Repeats:
    """The run of identical counts that is still going on."""

    __slots__ = ("_count", "same", "since_s")

    def __init__(self) -> None:
        self._count, self.same, self.since_s = float("nan"), 0, 0.0

    def forget(self) -> None:
        self._count, self.same = float("nan"), 0

    def feed(self, time_s: float, count: float) -> int:
        """How many samples before this one were the same without a break."""
        if count == self._count:
            self.same += 1
        else:
            self._count, self.same, self.since_s = count, 0, time_s
        return self.same

    def longest(self, counts: Floats) -> int:
        """The highest answer `feed` would give anywhere in this stretch."""
        changes = np.flatnonzero(counts[1:] != counts[:-1])
        if changes.size == 0:
            return len(counts) - 1 + (self.same + 1 if counts[0] == self._count else 0)
        first = int(changes[0]) + (self.same + 1 if counts[0] == self._count else 0)
        middle = int(np.diff(changes).max()) - 1 if changes.size > 1 else 0
        return max(first, middle, len(counts) - 2 - int(changes[-1]))

    def take(self, times_s: Floats, counts: Floats) -> None:
        """The same as feeding every sample."""
        changes = np.flatnonzero(counts[1:] != counts[:-1])
        if changes.size == 0 and counts[0] == self._count:
            self.same += len(counts)
            return
        last = int(changes[-1]) + 1 if changes.size else 0
        self._count, self.same, self.since_s = float(counts[-1]), len(counts) - 1 - last, float(times_s[last])
        if changes.size == 0:
            self.since_s = float(times_s[0])
