"""Motion supervision: rows 7 to 14 of the limits as small pure judges. Commands nothing itself."""

from __future__ import annotations

from collections import deque
from math import sqrt

import numpy as np

from daq.cards.frame import Motion
from daq.stream.block import Floats
from daq.watch.expected import SECONDS_PER_MINUTE
from daq.watch.limits import INFINITE, Reaction, Trip
from daq.watch.noise import Level
from daq.watch.travel import Travel

RUNAWAY_TIMES = 3.0
RUNAWAY_S, RUNAWAY_SAMPLES_MIN, RUNAWAY_SAMPLES_MAX = 0.01, 10, 1000
RUNAWAY_MARGIN_SHARE = 0.015
RUNAWAY_IN_A_ROW = 3  # one more than the longest glitch
RUNAWAY_FROM_SHARE = 0.10
APPROACH_SHARE = 0.5
TOUCH_SIGMA, TOUCH_SHARE, TOUCH_N_MIN = 10.0, 0.003, 0.5
CONTACT_SLACK_MM = 1.0
RECKONED_TIMES = 2.0
FLAT_TRAVEL_SHARE, FLAT_SLOPE_SHARE, FLAT_SIGMA = 0.05, 0.10, 8.0
FLAT_WINDOWS = 2
STALLED_SHARE = 0.5
FLAT_TOE_TIMES = 4.0  # a padded fixture's toe begins at about a tenth of the final slope
CEILING_TIMES, CEILING_MM_MIN = 2.5, 0.2
SOFT_END_MM = 2.0
SPEED_SHARE, SPEED_S = 0.2, 0.5
STANDS_SHARE, SPEED_EVERY_S = 0.05, 0.1
BACK_MM_MIN = 0.005


def touch_n(capacity_n: float, sigma_n: float) -> float:
    """Row 6: the load above the resting one that counts as contact."""
    return max(TOUCH_SIGMA * sigma_n, TOUCH_SHARE * capacity_n, TOUCH_N_MIN)


def approach_mm_min(motion: Motion, capacity_n: float, touch: float, seen_s: float) -> float:
    """Row 7: v <= (0.5 C - F_touch)/(k_blocked t_stop). seen_s: until a touch is seen, added to the stop."""
    room_n = APPROACH_SHARE * capacity_n - touch
    stop_s = motion.stop_latency_s + seen_s
    return SECONDS_PER_MINUTE * room_n / (motion.blocked_stiffness_n_mm * stop_s)


class Runaway:
    """Row 8: the force rises more than three times as fast as planned, beyond what noise can do.

    A gross rise (a wrong speed unit is 60 times the plan) is seen over 10 ms against a margin of 1.5 % of the
    expected load, so that noise that comes up suddenly is not one; three samples in a row, because a glitch has two;
    and only on new ground: coming back from a dropout is fast, but leads nowhere new. A modest one is seen in the
    slope of the forecast line (0.1 s), two beats in a row.
    """

    __slots__ = (
        "_count",
        "_from_n",
        "_lag_s",
        "_margin_n",
        "_planned_n",
        "_recent",
        "_rise_n",
        "_steep",
        "_to_n",
    )

    def __init__(self, rate_n_s: float, load_p50_n: float, sigma_n: float, rate_hz: float) -> None:
        lag = min(max(RUNAWAY_SAMPLES_MIN, round(RUNAWAY_S * rate_hz)), RUNAWAY_SAMPLES_MAX)
        self._lag_s = lag / rate_hz
        self._planned_n = RUNAWAY_TIMES * rate_n_s * self._lag_s
        self._margin_n = RUNAWAY_MARGIN_SHARE * load_p50_n
        self.use_noise(sigma_n)
        self._from_n, self._to_n = RUNAWAY_FROM_SHARE * load_p50_n, load_p50_n
        self._recent: deque[float] = deque(maxlen=lag)
        self._count = self._steep = 0

    def use_noise(self, sigma_n: float) -> None:
        """Noise that has come up since the zero must not look like a rise."""
        self._rise_n = self._planned_n + max(3.0 * sqrt(2.0) * sigma_n, self._margin_n)

    def judge_slope(self, level: Level, net_n: float) -> Trip | None:
        """At a beat: the slope of the whole forecast line, beyond three times its own error."""
        limit = self._planned_n / self._lag_s + 3.0 * level.slope_error_n_s
        if not (level.full and level.slope_n_s > limit and self._from_n < net_n < self._to_n):
            self._steep = 0
            return None
        self._steep += 1
        return Trip(8, level.slope_n_s, limit, "N/s", Reaction.STOP) if self._steep >= 2 else None

    def judge(self, net_n: float, highest_n: float) -> Trip | None:
        recent = self._recent
        full = len(recent) == recent.maxlen
        rise = net_n - recent[0] if full else 0.0
        recent.append(net_n)
        if not (rise > self._rise_n and self._from_n < net_n < self._to_n and net_n > highest_n):
            self._count = 0
            return None
        self._count += 1
        if self._count < RUNAWAY_IN_A_ROW:
            return None
        return Trip(8, rise / self._lag_s, self._rise_n / self._lag_s, "N/s", Reaction.STOP)

    def quiet(self, net_n: Floats) -> bool:
        """True if no sample of this stretch rises too fast, wherever it lies."""
        before = np.array(self._recent)
        together = np.concatenate((before, net_n))
        lag = self._recent.maxlen
        assert lag is not None
        if len(together) <= lag:
            return True
        return float((together[lag:] - together[:-lag]).max()) <= self._rise_n

    def take(self, net_n: list[float]) -> None:
        """Go past a stretch that `quiet` has proven."""
        self._count = 0
        self._recent.extend(net_n)


class Flat:
    """Row 10: moving in contact without a rise of the force, over two windows of travel in a row: the slip
    that hides in the noise, or a glitch at the edge of a window, makes one window flat and not the next.
    """

    __slots__ = (
        "_flat_windows",
        "_from_mm",
        "_from_n",
        "_from_way_mm",
        "_stiffness_n_mm",
        "_toe_n",
        "_travel_mm",
    )

    def __init__(self, stiffness_n_mm: float, deflection_mm: float, level: Level) -> None:
        samples = max(8.0, 0.1 / level.period_s)
        sigma_gain = sqrt(2.0) * level.sigma_rest_n * 2.0 / sqrt(samples)
        self._stiffness_n_mm = stiffness_n_mm
        self._toe_n = RUNAWAY_FROM_SHARE * stiffness_n_mm * deflection_mm
        self._travel_mm = max(FLAT_TRAVEL_SHARE * deflection_mm, FLAT_SIGMA * sigma_gain / stiffness_n_mm)
        self._from_mm, self._from_way_mm, self._from_n = INFINITE, 0.0, 0.0
        self._flat_windows = 0

    def restart(self) -> None:
        """After a drop or a kink: what came before says nothing about what comes now."""
        self._from_mm = INFINITE
        self._flat_windows = 0

    def judge(self, at_mm: float, way_mm: float, net_n: float) -> Trip | None:
        """at_mm: as measured. way_mm: reckoned from the set speeds; half of it counts, since a drive that stands still
        must not hide a force that stands still.
        """
        if self._from_mm == INFINITE:
            self._from_mm, self._from_way_mm, self._from_n = at_mm, way_mm, net_n
        gain_n = net_n - self._from_n
        travel_mm = max(at_mm - self._from_mm, STALLED_SHARE * (way_mm - self._from_way_mm))
        if travel_mm < self._travel_mm * (FLAT_TOE_TIMES if net_n < self._toe_n else 1.0):
            return None
        needed_n = FLAT_SLOPE_SHARE * self._stiffness_n_mm * travel_mm
        self._from_mm, self._from_way_mm, self._from_n = at_mm, way_mm, net_n
        self._flat_windows = 0 if gain_n >= needed_n else self._flat_windows + 1
        if self._flat_windows < FLAT_WINDOWS:
            return None
        return Trip(10, gain_n, needed_n, "N", Reaction.STOP)


class PositionJudge:
    """Rows 9, 11 and 13: bands of the position along the way towards the specimen; two samples in a row."""

    __slots__ = ("_rows", "high_mm", "low_mm", "outside")

    def __init__(self) -> None:
        self.outside: dict[int, int] = {}
        self.take(())

    def take(self, rows: tuple[tuple[int, float, float], ...]) -> None:
        """rows: (row, low_mm, high_mm)."""
        self._rows = rows
        self.outside.clear()
        self.low_mm = max((low for _, low, _ in rows), default=-INFINITE)
        self.high_mm = min((high for _, _, high in rows), default=INFINITE)

    def inside(self) -> None:
        self.outside.clear()

    def judge(self, at_mm: float) -> Trip | None:
        passed = None
        for place, (row, low, high) in enumerate(self._rows):
            if low <= at_mm <= high:
                self.outside.pop(place, None)
                continue
            self.outside[place] = count = self.outside.get(place, 0) + 1
            if count >= 2 and passed is None:
                passed = Trip(row, at_mm, high if at_mm > high else low, "mm", Reaction.STOP)
        return passed


def soft_ends(motion: Motion, speed_mm_s: float, towards: int) -> tuple[int, float, float]:
    """Row 13: 2 mm and the way of the stop inside the end the crosshead moves to; the other end stays open."""
    low, high = sorted((towards * motion.travel_mm_min, towards * motion.travel_mm_max))
    margin = SOFT_END_MM + abs(speed_mm_s) * motion.stop_latency_s
    if speed_mm_s >= 0:
        return (13, -INFINITE, high - margin)
    return (13, low + margin, INFINITE)


class SpeedWatch:
    """Row 14: off by a fifth of the set speed for half a second: caution. The other way at once: stop."""

    __slots__ = (
        "_due_s",
        "_high_mm_s",
        "_low_mm_s",
        "_off_since_s",
        "_set_mm_s",
        "_settle_s",
        "_settled_s",
        "_told",
        "_window_s",
        "stands",
    )

    def __init__(self, set_mm_s: float, begun_s: float, latency_s: float, travel: Travel) -> None:
        self._set_mm_s, self._told, self.stands = set_mm_s, False, False
        needed_s = 10.0 * travel.resolution_mm / abs(set_mm_s)
        self._window_s = min(max(SPEED_S, needed_s, 5.0 * travel.spacing_s), 2.0)
        self._settle_s = 2.0 * latency_s + self._window_s
        self._due_s = begun_s + self._settle_s
        self._off_since_s: float | None = None
        self._low_mm_s = self._high_mm_s = set_mm_s
        self._settled_s = begun_s

    def retune(self, set_mm_s: float, now_s: float) -> None:
        """The set speed has changed on the way: until that shows, any speed between the old one and it is right."""
        self._settle(now_s)
        self._set_mm_s, self._settled_s = set_mm_s, now_s + self._settle_s
        self._low_mm_s, self._high_mm_s = min(self._low_mm_s, set_mm_s), max(self._high_mm_s, set_mm_s)

    def _settle(self, now_s: float) -> None:
        if now_s >= self._settled_s:
            self._low_mm_s = self._high_mm_s = self._set_mm_s

    def judge(self, now_s: float, travel: Travel) -> Trip | None:
        if self._told or now_s < self._due_s:
            return None
        self._due_s = now_s + SPEED_EVERY_S
        speed = travel.speed_mm_s(self._window_s)
        if speed is None:
            return None
        seen = SPEED_SHARE * abs(self._set_mm_s) + 2.0 * travel.resolution_mm / self._window_s
        if speed * self._set_mm_s < 0.0 and abs(speed) > seen:
            self._told = True
            minutes = SECONDS_PER_MINUTE
            return Trip(14, speed * minutes, self._set_mm_s * minutes, "mm/min", Reaction.STOP)
        self._settle(now_s)
        if self._low_mm_s - seen <= speed <= self._high_mm_s + seen:
            self._off_since_s = None
            return None
        if self._off_since_s is None:
            self._off_since_s = now_s
        if now_s - self._off_since_s < SPEED_S:
            return None
        self._told = True
        self.stands = abs(speed) < STANDS_SHARE * abs(self._set_mm_s)
        minutes = SECONDS_PER_MINUTE
        return Trip(14, speed * minutes, self._set_mm_s * minutes, "mm/min", Reaction.CAUTION)


def back_mm_min(travel: Travel, deflection_mm: float) -> float:
    """Going back by more than this is a reversal, not a recoil or noise."""
    return max(BACK_MM_MIN, 6.0 * travel.resolution_mm, 0.03 * deflection_mm)
