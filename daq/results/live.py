"""Running slopes for the screen: over the last half second, and over everything so far. O(1) a sample.

Time is cut into buckets of 25 ms that stand on the clock, not on the blocks, so any cut of the stream into
blocks gives the same slopes (to rounding).
"""

from __future__ import annotations

from collections import deque
from itertools import pairwise

import numpy as np

from daq.results.moments import Moments, merge, moments_of
from daq.stream.block import Floats

BUCKET_S = 0.025
WINDOW_BUCKETS = 20  # 0.5 s
SAMPLES_MIN = 4
SPAN_SHARE_MIN = 0.5  # of the window: a slope over less is not shown


class WindowSlope:
    """dy/dt over the last 0.5 s."""

    def __init__(self) -> None:
        self._buckets: deque[tuple[int, Moments]] = deque(maxlen=WINDOW_BUCKETS + 1)

    def clear(self) -> None:
        self._buckets.clear()

    def feed(self, time_s: Floats, value: Floats) -> None:
        """Finite samples in time order."""
        if time_s.size == 0:
            return
        numbers = np.floor(time_s / BUCKET_S).astype(np.int64)
        edges = np.concatenate(([0], np.flatnonzero(np.diff(numbers)) + 1, [numbers.size]))
        for start, end in pairwise(edges.tolist()):
            part = moments_of(time_s[start:end], value[start:end])
            self._add(int(numbers[start]), part)
        newest = int(numbers[-1])
        while self._buckets and self._buckets[0][0] <= newest - WINDOW_BUCKETS:
            self._buckets.popleft()

    def _add(self, number: int, part: Moments) -> None:
        if self._buckets and self._buckets[-1][0] == number:
            self._buckets[-1] = (number, merge(self._buckets[-1][1], part))
        else:
            self._buckets.append((number, part))

    @property
    def slope(self) -> float:
        """NaN until the samples reach over half of the window."""
        if not self._buckets or self._buckets[-1][0] - self._buckets[0][0] < SPAN_SHARE_MIN * WINDOW_BUCKETS:
            return float("nan")
        whole = Moments()
        for _, part in self._buckets:
            whole = merge(whole, part)
        return whole.slope if whole.count >= SAMPLES_MIN else float("nan")


class RunningStiffness:
    """dF/ds over everything fed; displacement is regressed on force, which is the better known of the two."""

    def __init__(self) -> None:
        self._moments = Moments()

    def feed(self, force_n: Floats, travel_mm: Floats) -> None:
        """Pairs with both numbers finite."""
        self._moments = merge(self._moments, moments_of(force_n, travel_mm))

    @property
    def stiffness_n_mm(self) -> float:
        """NaN without a rise of travel with force."""
        slope = self._moments.slope
        return 1.0 / slope if slope > 0 else float("nan")

    @property
    def two_sigma_share(self) -> float:
        """Its own relative 2 sigma, from the residuals."""
        slope = self._moments.slope
        return 2.0 * self._moments.u_slope / slope if slope > 0 else float("nan")
