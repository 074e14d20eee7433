"""Seating: when the stiffness has become steady, and how long the toe was. Tells; stops nothing.

Slopes over windows of max(0.2 s, 20 samples, 2 % of the time to the median break load,
and as long as the noise needs for a slope good to 5 % at two sigma): in noise a shorter window would never
look steady.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from math import cbrt, sqrt

WINDOW_S = 0.2
WINDOW_SAMPLES = 20
SAMPLES_MIN, WINDOWS_MIN = 6, 12  # three windows of 20 samples would be half of a run at 10 S/s
WINDOW_SHARE = 0.02
STEADY = 0.05
STEADY_WINDOWS = 3
WINDOWS_KEPT = 64
SHOWN_ERRORS = 3.0 * sqrt(2.0)  # of one slope's: a difference of two that noise does not make
OF_HIGHEST = 0.7
FORCE_SIGMA = 10.0
FORCE_SHARE = 0.01
TOE_SHARE = 0.25
LATE_RISE = 0.10
LATE_FROM, LATE_TO = 0.5, 0.8


@dataclass(frozen=True, slots=True)
class Seated:
    """force: now; toe: where the steady windows began. toe_offset_mm: travel from first contact to where the
    straight line would have begun; None: no position.
    """

    force_net_n: float
    toe_net_n: float
    slope_n_s: float
    toe_offset_mm: float | None
    late_known: bool = False


def seating_window_s(rate_hz: float, sigma_n: float, rate_n_s: float, time_to_break_s: float) -> float:
    by_noise_s = cbrt(48.0 * sigma_n**2 / (rate_hz * (STEADY * rate_n_s) ** 2))
    by_samples_s = max(min(WINDOW_SAMPLES / rate_hz, time_to_break_s / WINDOWS_MIN), SAMPLES_MIN / rate_hz)
    return max(WINDOW_S, by_samples_s, WINDOW_SHARE * time_to_break_s, by_noise_s)


def slope_u_n_s(rate_hz: float, sigma_n: float, window_s: float) -> float:
    """Standard error of a least-squares slope over one window of white noise."""
    return sigma_n * sqrt(12.0 / (rate_hz * window_s**3))


class Seating:
    """Slope of the force, window by window, while seating and loading."""

    __slots__ = (
        "_begun_s",
        "_contact_mm",
        "_highest",
        "_late_from",
        "_n",
        "_shown_n_s",
        "_slopes",
        "_speed_mm_s",
        "_st",
        "_start_n",
        "_stt",
        "_stx",
        "_sx",
        "_told_late",
        "_window_s",
        "_windows",
        "force_min_n",
        "load_p50_n",
        "seated",
    )

    def __init__(
        self,
        *,
        window_s: float,
        sigma_n: float,
        load_p50_n: float,
        speed_mm_s: float,
        contact_mm: float | None,
        slope_u_n_s: float = 0.0,
    ) -> None:
        self._shown_n_s = SHOWN_ERRORS * slope_u_n_s
        self._window_s, self._contact_mm, self._speed_mm_s = window_s, contact_mm, speed_mm_s
        self.load_p50_n = load_p50_n
        self.force_min_n = max(FORCE_SIGMA * sigma_n, FORCE_SHARE * load_p50_n)
        self._slopes: deque[float] = deque(maxlen=STEADY_WINDOWS)
        self._windows: deque[tuple[float, float]] = deque(maxlen=WINDOWS_KEPT)  # force at its start, slope
        self._start_n = 0.0
        self._highest = 0.0
        self._late_from: float | None = None
        self._told_late = False
        self.seated: Seated | None = None
        self._begun_s = float("-inf")
        self._n, self._st, self._stt, self._sx, self._stx = 0, 0.0, 0.0, 0.0, 0.0

    def feed(self, time_s: float, net_n: float, at_mm: float | None) -> Seated | str | None:
        """One bin mean. Returns the note once seated, or the words of a caution."""
        if self._begun_s == float("-inf"):
            self._begun_s, self._start_n = time_s, net_n
        off_s = time_s - self._begun_s
        self._n += 1
        self._st += off_s
        self._stt += off_s * off_s
        self._sx += net_n
        self._stx += off_s * net_n
        if off_s < self._window_s or self._n < 3:
            return None
        spread = self._stt - self._st * self._st / self._n
        slope = (self._stx - self._st * self._sx / self._n) / spread
        self._windows.append((self._start_n, slope))
        self._begin(time_s)
        self._start_n = net_n
        return self._window_done(slope, net_n, at_mm, time_s)

    def restart(self) -> None:
        """After a partial drop: a window across it would show nothing true."""
        self._begin(float("-inf"))
        self._slopes.clear()
        self._windows.clear()

    def _begin(self, time_s: float) -> None:
        self._begun_s = time_s
        self._n, self._st, self._stt, self._sx, self._stx = 0, 0.0, 0.0, 0.0, 0.0

    def _window_done(
        self, slope: float, net_n: float, at_mm: float | None, time_s: float
    ) -> Seated | str | None:
        self._slopes.append(slope)
        self._highest = max(self._highest, slope)
        if self.seated is None:
            if self._steady(slope) and net_n > self.force_min_n:
                toe_mm = self._toe_mm(slope, net_n, at_mm)
                self.seated = Seated(net_n, self._toe_n(slope), slope, toe_mm, self._told_late)
                return self.seated
            if net_n > LATE_FROM * self.load_p50_n and not self._told_late and self._unsteady(slope):
                self._told_late = True
                return "not steady at half the expected break load"
        return self._late(slope, net_n)

    def _steady(self, slope: float) -> bool:
        if len(self._slopes) < STEADY_WINDOWS or slope <= 0 or slope < OF_HIGHEST * self._highest:
            return False
        pairs = zip(self._slopes, list(self._slopes)[1:], strict=False)
        return all(abs(after - before) < STEADY * slope for before, after in pairs)

    def _unsteady(self, slope: float) -> bool:
        """Shown beyond the noise: a caution for what noise alone can do would be one in every few bars."""
        if len(self._slopes) < STEADY_WINDOWS:
            return False
        pairs = zip(self._slopes, list(self._slopes)[1:], strict=False)
        worst = max(abs(after - before) for before, after in pairs)
        return (
            worst > STEADY * slope + self._shown_n_s or slope < OF_HIGHEST * self._highest - self._shown_n_s
        )

    def _late(self, slope: float, net_n: float) -> str | None:
        """Twist that settles late shows as a stiffness that still rises between half and four fifths."""
        if net_n < LATE_FROM * self.load_p50_n or net_n > LATE_TO * self.load_p50_n:
            return None
        if self._late_from is None:
            self._late_from = slope
        if self._told_late or not slope > (1.0 + LATE_RISE) * self._late_from + self._shown_n_s:
            return None
        self._told_late = True
        return "stiffness still rises late"

    def _toe_n(self, slope: float) -> float:
        """Where the steady stretch began: noise may have hidden for several windows that it was one."""
        toe_n, like = self._windows[-1][0], STEADY * slope + self._shown_n_s
        for start_n, before in reversed(self._windows):
            if abs(before - slope) > like:
                break
            toe_n = start_n
        return toe_n

    def _toe_mm(self, slope: float, net_n: float, at_mm: float | None) -> float | None:
        if at_mm is None or self._contact_mm is None:
            return None
        return at_mm - net_n * self._speed_mm_s / slope - self._contact_mm
