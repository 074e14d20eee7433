"""Level: where the force is going and how noisy it is. One forecast line, one robust sigma, no judgement.

The line is fitted to the last 0.1 s (at least 8 samples) and held constant for a bin of samples, so that the
scalar and the vectorised path compare the very same numbers: neither accumulates anything inside a bin. Sigma
is max(1.4826 median|r| over 0.5 s, sigma at rest, step/sqrt 12) with r the residuals of the forecast
(hum and drift end in r too, second differences would miss them). The reference takes at most 200 samples
into the line; here they are binned instead, so that 0.1 s stays 0.1 s at 50 kS/s, where 200 samples would
follow the mains hum.
"""

from __future__ import annotations

from collections import deque
from math import sqrt

LINE_S = 0.1
LINE_SAMPLES_MIN = 8
BINS_MAX = 16
NOISE_S = 0.5
NOISE_SAMPLES_MIN = 64
NOISE_KEPT_MAX = 256
MAD_TO_SIGMA = 1.4826
NOISE_KEPT_TO_BELIEVE = 32
HISTORY_S = 3.5


class Level:
    """Forecast line, threshold and noise of one force stream, fed with accepted samples only."""

    __slots__ = (
        "_bins_s",
        "_bins_x",
        "_kept",
        "_kept_left",
        "_refresh_left",
        "_share",
        "at_n",
        "bin_samples",
        "history",
        "limit_n",
        "origin_s",
        "pending_s",
        "pending_x",
        "period_s",
        "sigma_n",
        "sigma_rest_n",
        "slope_n_s",
        "stride",
        "threshold_share",
        "threshold_sigma",
    )

    def __init__(self, rate_hz: float, sigma_rest_n: float) -> None:
        samples = max(LINE_SAMPLES_MIN, round(LINE_S * rate_hz))
        self.period_s = 1.0 / rate_hz
        self.bin_samples = max(1, samples // BINS_MAX)
        bins = -(-samples // self.bin_samples)
        self._bins_s: deque[float] = deque(maxlen=bins)
        self._bins_x: deque[float] = deque(maxlen=bins)
        self.pending_s: list[float] = []
        self.pending_x: list[float] = []
        noise_samples = max(NOISE_SAMPLES_MIN, round(NOISE_S * rate_hz))
        self.stride = -(-noise_samples // NOISE_KEPT_MAX)
        self._kept: deque[float] = deque(maxlen=noise_samples // self.stride)
        self._kept_left = self.stride
        self._refresh_left, self._share = 1, 1.0
        self.history: deque[tuple[float, float]] = deque(
            maxlen=round(HISTORY_S * rate_hz / self.bin_samples) + 1
        )
        self.threshold_sigma, self.threshold_share = 6.0, 0.02
        self.at_n, self.slope_n_s, self.origin_s = 0.0, 0.0, 0.0
        self.limit_n = float("inf")
        self.sigma_rest_n = self.sigma_n = sigma_rest_n

    def forecast(self, time_s: float) -> float:
        return self.at_n + self.slope_n_s * (time_s - self.origin_s)

    @property
    def bin_s(self) -> float:
        """How long a bin is."""
        return self.bin_samples * self.period_s

    @property
    def newest_n(self) -> float | None:
        """Mean of the newest whole bin."""
        return self._bins_x[-1] if self._bins_x else None

    @property
    def newest_s(self) -> float | None:
        return self._bins_s[-1] if self._bins_s else None

    def add(self, time_s: float, value: float, residual: float) -> bool:
        """One accepted sample; True where it completed a bin and the forecast was made anew."""
        self.pending_s.append(time_s)
        self.pending_x.append(value)
        self._kept_left -= 1
        if self._kept_left == 0:
            self._kept_left = self.stride
            self._kept.append(abs(residual) * self._share)
        if len(self.pending_x) < self.bin_samples:
            return False
        self._close_bin()
        return True

    def add_many(self, times_s: list[float], values: list[float], residuals: list[float]) -> bool:
        """The same for a stretch that does not reach beyond the bin."""
        self.pending_s += times_s
        self.pending_x += values
        assert len(self.pending_x) <= self.bin_samples
        first = self._kept_left - 1
        self._kept.extend([abs(r) * self._share for r in residuals[first :: self.stride]])
        self._kept_left = self.stride - (len(residuals) - self._kept_left) % self.stride
        if len(residuals) < first + 1:
            self._kept_left = first + 1 - len(residuals)
        if len(self.pending_x) < self.bin_samples:
            return False
        self._close_bin()
        return True

    @property
    def full(self) -> bool:
        """The line has all the bins it can have."""
        return len(self._bins_x) == self._bins_x.maxlen

    @property
    def slope_error_n_s(self) -> float:
        """Standard error of the slope of a full line, from the noise."""
        samples = len(self._bins_x) * self.bin_samples
        return self.sigma_n * sqrt(12.0 / samples**3) / self.period_s

    @property
    def room(self) -> int:
        """Samples until the bin is full."""
        return self.bin_samples - len(self.pending_x)

    def stand(self) -> None:
        """The force stands: keep the newest bin alone, so that an older climb does not go on in the forecast."""
        for kept in (self._bins_s, self._bins_x):
            while len(kept) > 1:
                kept.popleft()
        self.slope_n_s = 0.0
        if self._bins_x:
            self._fit()

    def begin_anew(self, times_s: list[float], values: list[float], slope_n_s: float | None) -> None:
        """Forget the line and begin with these samples; the slope is kept until there are three bins."""
        self._bins_s.clear()
        self._bins_x.clear()
        self.pending_s.clear()
        self.pending_x.clear()
        if slope_n_s is not None:
            self.slope_n_s = slope_n_s
        size = self.bin_samples
        for start in range(0, len(values) - size + 1, size):
            self._keep(sum(times_s[start : start + size]) / size, sum(values[start : start + size]) / size)
        rest = len(values) // size * size
        self.pending_s += times_s[rest:]
        self.pending_x += values[rest:]
        if not self._bins_x:
            self._keep(sum(times_s) / len(times_s), sum(values) / len(values))
            self.pending_s.clear()
            self.pending_x.clear()
        self._fit()

    def _close_bin(self) -> None:
        size = self.bin_samples
        if size == 1:
            time_s, value = self.pending_s[0], self.pending_x[0]
        else:
            time_s, value = sum(self.pending_s) / size, sum(self.pending_x) / size
        self.pending_s.clear()
        self.pending_x.clear()
        self._keep(time_s, value)
        self._refresh_left -= 1
        if self._refresh_left <= 0:
            self._refresh()
        self._fit()

    def _keep(self, time_s: float, value: float) -> None:
        self._bins_s.append(time_s)
        self._bins_x.append(value)
        self.history.append((time_s, value))

    def _refresh(self) -> None:
        kept = len(self._kept)
        # about 16 refreshes per noise window: a median each time would cost more than everything else together
        self._refresh_left = max(1, self._kept.maxlen * self.stride // (16 * self.bin_samples))  # type: ignore[operator]
        if kept < NOISE_KEPT_TO_BELIEVE:
            return
        median = sorted(self._kept)[kept // 2]
        self.sigma_n = max(MAD_TO_SIGMA * median, self.sigma_rest_n)

    def _fit(self) -> None:
        """Least squares through the bins; the threshold grows with the uncertainty of the extrapolation."""
        times, values = self._bins_s, self._bins_x
        n = len(values)
        mid_s, mid_x = sum(times) / n, sum(values) / n
        spread = cross = 0.0
        for time_s, value in zip(times, values, strict=True):
            off_s = time_s - mid_s
            spread += off_s * off_s
            cross += off_s * value
        ahead_s = times[-1] - mid_s + self.bin_samples * self.period_s
        if n >= 3:
            self.slope_n_s = cross / spread
            leverage = (1.0 / n + ahead_s * ahead_s / spread) / self.bin_samples
        else:
            leverage = 1.0
        self.origin_s, self.at_n = mid_s, mid_x
        widening = sqrt(1.0 + leverage)
        self._share = 1.0 / widening  # of a residual that is the sample's own noise, not the forecast's
        wide = self.threshold_sigma * self.sigma_n * widening
        self.limit_n = max(wide, self.threshold_share * (mid_x + self.slope_n_s * ahead_s))
