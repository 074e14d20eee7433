"""ClockModel: ties a device's sample counter to the bench's monotonic clock. Pure; carries its own state.

A sample can arrive late but never early. So the earliest arrivals of each second, the lower envelope, lie
close to the device's own clock, and a robust line through them gives its offset and drift. Sample times are
read off that line. They rise strictly and are not later than their packet's arrival; where a packet shows the
line to have been late, times wait for it, rising by a thousandth of a period. Towards a better line they move
by at most 2 % of the sample period, and they never jump unless the device's clock has jumped.

Times are late by the shortest way the bytes ever took, which nothing on the host can see. The result is a
pure function of the sequence of calls. Cutting the same packets differently moves times by less than one
period once the first second is over.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import numpy as np

from daq.stream.block import Floats

BUCKET_S = 1.0  # one point of the envelope for each second
BUCKETS_MAX = 32  # half a minute: 0.1 ms of envelope noise is 3 ppm of drift
DRIFT_POINTS_MIN = 8
DRIFT_MAX = 0.01  # oscillators are 100 times better; this only bounds nonsense
SLEW = 0.02
STEP_S = 0.25  # an envelope that moves by more is another clock, not drift
_TINY = 1e-3  # part of a period by which times rise where they have to wait


@dataclass(frozen=True, slots=True)
class _Second:
    """One second of arrivals: the earliest against the nominal rate, and how late the others were."""

    index: int
    residual_s: float
    late_s_mean: float
    late_s_most: float


class ClockModel:
    """One per source. `feed` gives the times of consecutive samples that arrived together.

    The line in use is time_s = line_s + step_s * (index - line_index).
    """

    def __init__(self) -> None:
        self.restarts = 0
        self._period_s = 0.0
        self._anchor_index = 0
        self._anchor_s = 0.0
        self._line_index = 0
        self._line_s = 0.0
        self._step_s = 0.0
        self._given_s = float("-inf")
        self._turn_index = 0
        self._seconds: deque[_Second] = deque(maxlen=BUCKETS_MAX)
        self._drift = 0.0
        self._least_index, self._least_s = 0, float("inf")
        self._most_s = self._sum_s = 0.0
        self._packets = 0

    @property
    def drift_ppm(self) -> float:
        """How much longer the device's period is than its nominal one; 0 until it is known."""
        return self._drift * 1e6

    @property
    def jitter_s(self) -> float:
        """Usual delay of a packet above the least: the middle one of the seconds' means."""
        return _middle(np.array([second.late_s_mean for second in self._seconds])) if self._seconds else 0.0

    @property
    def delay_s_max(self) -> float:
        """Longest delay above the least within the last half minute."""
        return max((second.late_s_most for second in self._seconds), default=0.0)

    def feed(self, first_index: int, count: int, arrival_s: float, period_s: float) -> Floats:
        """(count,) times in s of samples first_index, first_index + 1, ... that arrived in one packet."""
        assert count > 0 and period_s > 0.0
        last_index = first_index + count - 1
        if period_s != self._period_s:
            self._anchor(last_index, arrival_s, period_s)
        elif last_index >= self._turn_index:
            self._turn(first_index, last_index)
        late_s = arrival_s - self._line_s - self._step_s * (last_index - self._line_index)
        if late_s < 0.0:
            self._line_s += late_s
            if late_s < -STEP_S:
                self._forget()
            late_s = 0.0
            self._least_index, self._least_s = last_index, 0.0
        elif late_s < self._least_s:
            self._least_index, self._least_s = last_index, late_s
        if late_s > self._most_s:
            self._most_s = late_s
        self._sum_s += late_s
        self._packets += 1
        return self._times(first_index, count)

    def _times(self, first_index: int, count: int) -> Floats:
        step_s, before_s = self._step_s, self._given_s
        first_s = self._line_s + step_s * (first_index - self._line_index)
        if first_s <= before_s:  # the line has moved back: wait for it, barely rising
            last_s = max(first_s + step_s * (count - 1), before_s + _TINY * self._period_s * count)
            step_s = (last_s - before_s) / count
            first_s = before_s + step_s
        if count == 1:
            self._given_s = first_s
            return np.array((first_s,))
        times_s: Floats = first_s + step_s * np.arange(count, dtype=np.float64)
        self._given_s = float(times_s[-1])
        return times_s

    def _anchor(self, index: int, arrival_s: float, period_s: float) -> None:
        """Begin, or begin again at another nominal rate."""
        self._period_s = self._step_s = period_s
        self._anchor_index = self._line_index = index
        self._anchor_s = self._line_s = arrival_s
        self._drift = 0.0
        self._seconds.clear()
        self._begin_second(index)

    def _begin_second(self, index: int) -> None:
        self._turn_index = index + max(1, round(BUCKET_S / self._period_s))
        self._least_index, self._least_s = index, float("inf")
        self._most_s = self._sum_s = 0.0
        self._packets = 0

    def _forget(self) -> None:
        """The clock has jumped: earlier envelope points say nothing about the new one."""
        self.restarts += 1
        self._seconds.clear()

    def _turn(self, first_index: int, last_index: int) -> None:
        """Once for each second of samples: take the old second's envelope point, steer the line."""
        if self._least_s > STEP_S:
            self._line_s += self._least_s
            self._forget()
        else:
            self._seconds.append(self._second())
            self._steer(first_index, last_index)
        self._begin_second(last_index)

    def _second(self) -> _Second:
        on_line_s = self._line_s + self._step_s * (self._least_index - self._line_index)
        nominal_s = self._anchor_s + self._period_s * (self._least_index - self._anchor_index)
        return _Second(
            index=self._least_index,
            residual_s=on_line_s + self._least_s - nominal_s,
            late_s_mean=self._sum_s / self._packets,
            late_s_most=self._most_s,
        )

    def _steer(self, first_index: int, last_index: int) -> None:
        """From where the line stands now to where the envelope will be at the end of the coming second."""
        x = np.array([second.index - self._anchor_index for second in self._seconds], dtype=np.float64)
        y = np.array([second.residual_s for second in self._seconds])
        if len(x) >= DRIFT_POINTS_MIN:
            self._drift = min(max(_slope(x, y) / self._period_s, -DRIFT_MAX), DRIFT_MAX)
        step_s = self._period_s * (1.0 + self._drift)
        least_s = float(np.min(y - self._drift * self._period_s * x))
        goal_index = last_index + max(1, round(BUCKET_S / self._period_s))
        goal_s = self._anchor_s + least_s + step_s * (goal_index - self._anchor_index)
        here_s = self._line_s + self._step_s * (first_index - self._line_index)
        slewed_s = (goal_s - here_s) / (goal_index - first_index)
        self._line_index, self._line_s = first_index, here_s
        self._step_s = min(max(slewed_s, step_s * (1.0 - SLEW)), step_s * (1.0 + SLEW))


def _slope(x: Floats, y: Floats) -> float:
    """Median of the slopes between all pairs of points.

    Theil-Sen estimator: Sen, P. K. (1968), J. Am. Stat. Assoc. 63, 1379-1389 (cited from memory).
    """
    first, second = np.triu_indices(len(x), 1)
    return _middle((y[second] - y[first]) / (x[second] - x[first]))


def _middle(values: Floats) -> float:
    """The middle value. numpy.median imports numpy.ma at its first call: 20 ms too many in a bench."""
    return float(np.sort(values)[len(values) // 2])
