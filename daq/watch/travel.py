"""Travel: where the crosshead is and how fast it goes, from the position channel. Judges nothing.

Positions are counted along the direction towards the specimen. Samples are thinned to about 200 per second:
speeds are asked over a tenth of a second and more.
"""

from __future__ import annotations

import itertools
from collections import deque
from math import sqrt

import numpy as np

from daq.stream.block import Floats

KEPT_S = 2.5
SPACING_S = 0.005
POINTS_MIN = 4


class Travel:
    """The last seconds of crosshead positions, mm, growing towards the specimen."""

    __slots__ = (
        "_before_mm",
        "_points",
        "at_mm",
        "resolution_mm",
        "spacing_s",
        "step_mm",
        "time_s",
        "top_mm",
    )

    def __init__(self, rate_hz: float, step_mm: float) -> None:
        self.spacing_s = max(SPACING_S, 1.0 / rate_hz)
        self._points: deque[tuple[float, float]] = deque(maxlen=int(KEPT_S / self.spacing_s) + 2)
        self.step_mm = self.resolution_mm = step_mm
        self.at_mm: float | None = None
        self._before_mm = float("nan")
        self.time_s = float("-inf")
        self.top_mm = float("-inf")

    def feed(self, time_s: float, at_mm: float) -> None:
        """A valid position; kept in the history only where the last kept one is old enough."""
        self._before_mm = at_mm if self.at_mm is None else self.at_mm
        self.at_mm, self.time_s = at_mm, time_s
        self.top_mm = max(self.top_mm, min(at_mm, self._before_mm))
        if not self._points or time_s >= self._points[-1][0] + 0.99 * self.spacing_s:
            self._points.append((time_s, at_mm))

    def feed_many(self, times_s: Floats, at_mm: Floats) -> None:
        """The same as feeding every one of them."""
        if len(at_mm) == 0:
            return
        first_mm = float(at_mm[0]) if self.at_mm is None else self.at_mm
        before_mm = np.concatenate(([first_mm], at_mm[:-1]))
        self._before_mm = float(before_mm[-1])
        self.at_mm, self.time_s = float(at_mm[-1]), float(times_s[-1])
        self.top_mm = max(self.top_mm, float(np.minimum(at_mm, before_mm).max()))
        place = 0
        while place < len(times_s):
            if self._points:
                due_s = self._points[-1][0] + 0.99 * self.spacing_s
                place = int(np.searchsorted(times_s, due_s, "left"))
                if place == len(times_s):
                    return
            self._points.append((float(times_s[place]), float(at_mm[place])))

    def forget(self) -> None:
        """The position is not known any more."""
        self.at_mm, self.top_mm = None, float("-inf")
        self._points.clear()

    def learn_at_rest(self, since_s: float) -> None:
        """What the channel can show: its smallest change and its noise, from positions known to be at rest."""
        rest = [x for t, x in self._points if t >= since_s]
        if len(rest) < POINTS_MIN:
            return
        steps = [abs(b - a) for a, b in itertools.pairwise(rest) if a != b]
        mid = sum(rest) / len(rest)
        sigma = sqrt(sum((x - mid) ** 2 for x in rest) / (len(rest) - 1))
        self.resolution_mm = max(self.step_mm, min(steps, default=0.0), 2.0 * sigma)

    def speed_mm_s(self, window_s: float) -> float | None:
        """Least-squares speed over the last window; None where it is not covered by enough points."""
        if not self._points:
            return None
        first_s = self._points[-1][0] - window_s
        points = []
        for point in reversed(self._points):
            if point[0] < first_s:
                break
            points.append(point)
        if len(points) < POINTS_MIN or points[0][0] - points[-1][0] < 0.7 * window_s:
            return None
        mid_s = sum(t for t, _ in points) / len(points)
        spread = sum((t - mid_s) ** 2 for t, _ in points)
        return sum((t - mid_s) * x for t, x in points) / spread

    def mean_mm(self, window_s: float) -> float:
        """Mean position over the last window; NaN where there is none."""
        if not self._points:
            return float("nan")
        first_s, total_mm, count = self._points[-1][0] - window_s, 0.0, 0
        for time_s, at_mm in reversed(self._points):
            if time_s < first_s:
                break
            total_mm, count = total_mm + at_mm, count + 1
        return total_mm / count

    def begin_move(self) -> None:
        """The furthest point is counted from here."""
        self.top_mm = self.at_mm if self.at_mm is not None else float("-inf")

    @property
    def back_mm(self) -> float:
        """How far the crosshead has gone back since the move began; one odd sample is not believed."""
        return self.top_mm - max(self.at_mm, self._before_mm) if self.at_mm is not None else 0.0

    def back_from_top_mm(self, since_s: float) -> float:
        """How far the crosshead has gone back from the furthest point it reached since then."""
        seen = [x for t, x in self._points if t >= since_s]
        if not seen or self.at_mm is None:
            return 0.0
        return max(seen) - self.at_mm
