"""Hum: mains lines in the force while loading, named by their true and their visible frequency. Tells only.

Row 18 of the limits: an amplitude above 0.1 % of the expected break load, or above five times that of the zero.
Taken from the bins of the forecast line over the last whole second (whole periods of every line, so that a steady rise
leaves nothing behind), one line a beat: a line costs about as much as three samples.
"""

from __future__ import annotations

import cmath
import itertools
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from math import pi, sin, sqrt

import numpy as np

from daq.stream.block import Floats

MAINS_HZ = (50.0, 60.0, 100.0, 120.0)
WINDOW_S, EVERY_S = 1.0, 1.0
LOAD_SHARE, QUIET_TIMES = 0.001, 5.0
NOISE_TIMES = 6.0  # of an amplitude's error in white noise: exp(-36/2), 15 in a billion (Rayleigh)
MAD_OF_SINE = 1.05  # 1.4826 x 0.707: what the robust noise makes of a sine of amplitude 1
GAIN_MIN = 0.25  # of what the mean over a bin leaves of a line; below it the line is not judged
BINS_MIN = 64  # in a window: fewer cannot be told from the bend of a rising force (seeds 61 and 158, 20 S/s)
APART_HZ = 1.5  # of a window of one second: what lies nearer to zero or to another line is not told apart


@dataclass(frozen=True, slots=True)
class HumLine:
    """One line that is too strong. limit: what it was held against, N."""

    true_hz: float
    seen_hz: float
    amplitude_n: float
    limit_n: float


@dataclass(frozen=True, slots=True)
class Tone:
    """Where a line stands in the bins: its frequency among samples, cycles per bin, and what the bin leaves of it."""

    true_hz: float
    seen_hz: float
    per_bin: float
    gain: float


def tones(rate_hz: float, bin_samples: int) -> tuple[Tone, ...]:
    """The lines that can be told at this rate, each place only once: the lower true frequency is named."""
    found: list[Tone] = []
    bins_hz = rate_hz / bin_samples
    if WINDOW_S * bins_hz < BINS_MIN:
        return ()
    for true_hz in MAINS_HZ:
        tone = _tone(true_hz, rate_hz, bin_samples)
        place_hz = tone.per_bin * bins_hz
        near = any(abs(place_hz - other.per_bin * bins_hz) < APART_HZ for other in found)
        if place_hz >= 2.0 * APART_HZ and tone.gain >= GAIN_MIN and not near:
            found.append(tone)
    return tuple(found)


def _tone(true_hz: float, rate_hz: float, bin_samples: int) -> Tone:
    """Aliases |f - fs round(f/fs)| of the samples, then of the bins; gain of a mean of n samples (Dirichlet kernel)."""
    seen_hz = abs(true_hz - rate_hz * round(true_hz / rate_hz))
    half = pi * seen_hz / rate_hz
    gain = abs(sin(bin_samples * half) / (bin_samples * sin(half))) if sin(half) else 1.0
    cycles = seen_hz * bin_samples / rate_hz
    return Tone(true_hz, seen_hz, abs(cycles - round(cycles)), gain)


def amplitude(values: Sequence[float], per_bin: float) -> float:
    """Amplitude of the line at so many cycles per value, a straight rise taken out first."""
    count = len(values)
    mid = 0.5 * (count - 1)
    mean = sum(values) / count
    spread = count * (count * count - 1) / 12.0
    slope = sum((k - mid) * x for k, x in enumerate(values)) / spread
    turn, phase, total = cmath.exp(-2j * pi * per_bin), 1.0 + 0.0j, 0.0j
    for k, x in enumerate(values):
        total += phase * (x - mean - slope * (k - mid))
        phase *= turn
    return 2.0 * abs(total) / count


class HumWatch:
    """One run's watch over the mains lines."""

    __slots__ = (
        "_bins",
        "_due_s",
        "_error",
        "_from_s",
        "_left",
        "_limits_n",
        "_share_n",
        "_sigma_n",
        "_values",
        "tones",
    )

    def __init__(
        self,
        rate_hz: float,
        bin_samples: int,
        *,
        sigma_n: float,
        load_p50_n: float,
        quiet_n: Mapping[float, float],
    ) -> None:
        """quiet_n: amplitude of each line while the zero was taken."""
        self.tones = tones(rate_hz, bin_samples)
        self._bins = round(WINDOW_S * rate_hz / bin_samples)
        self._sigma_n, self._error = sigma_n, NOISE_TIMES * sqrt(2.0 / (WINDOW_S * rate_hz))
        self._share_n = LOAD_SHARE * load_p50_n
        self._limits_n = {
            tone.true_hz: min(self._share_n, QUIET_TIMES * quiet_n.get(tone.true_hz, float("inf")))
            for tone in self.tones
        }
        self._values: list[float] = []
        self._left: list[Tone] = []
        self._due_s, self._from_s = float("-inf"), float("inf")

    def beat(
        self, now_s: float, smooth_since_s: float, sigma_n: float, history: Iterable[tuple[float, float]]
    ) -> HumLine | None:
        """history: (time, mean) of bins, newest first. sigma_n: noise now. Nothing before smooth_since_s or the first
        beat counts.
        """
        if not self._left:
            self._from_s = min(self._from_s, now_s)
            if now_s < self._due_s or now_s - max(smooth_since_s, self._from_s) < WINDOW_S:
                return None
            self._due_s = now_s + EVERY_S
            self._values = [value for _, value in itertools.islice(history, self._bins)]
            self._left = list(self.tones) if len(self._values) == self._bins else []
            return None
        return self.judge(self._left.pop(), self._values, sigma_n)

    def at_rest(self, amplitudes_n: Mapping[float, float]) -> list[HumLine]:
        """Lines that are too strong already where the zero was taken."""
        limit_n = max(self._share_n, self._error * self._sigma_n)
        return [
            HumLine(tone.true_hz, tone.seen_hz, amplitudes_n[tone.true_hz], limit_n)
            for tone in self.tones
            if amplitudes_n.get(tone.true_hz, 0.0) > limit_n
        ]

    def judge(self, tone: Tone, values: Sequence[float], sigma_n: float) -> HumLine | None:
        """sigma_n holds the line itself as well, which is no noise to it."""
        found_n = amplitude(values, tone.per_bin) / tone.gain
        rest_n = sqrt(max(self._sigma_n**2, sigma_n**2 - (MAD_OF_SINE * found_n) ** 2))
        limit_n = max(self._limits_n[tone.true_hz], self._error * rest_n / tone.gain)
        return HumLine(tone.true_hz, tone.seen_hz, found_n, limit_n) if found_n > limit_n else None


def quiet_amplitudes(rate_hz: float, values: Floats) -> dict[float, float]:
    """Amplitude of each line in samples at rest, over the last whole window; empty where there are too few."""
    count = round(WINDOW_S * rate_hz)
    if len(values) < count:
        return {}
    newest, k = values[-count:], np.arange(count)
    rest = newest - np.polyval(np.polyfit(k, newest, 1), k)
    return {
        tone.true_hz: float(2.0 / count * abs(np.exp(-2j * pi * tone.per_bin * k) @ rest))
        for tone in tones(rate_hz, 1)
    }
