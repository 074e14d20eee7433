"""The quiet record: noise, hum, drift and resolution of a force signal at rest. Pure.

The reference for every later check. It judges nothing; it says what is there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.stream.block import Floats

MAINS_HZ = (50.0, 60.0, 100.0, 120.0)
MAD_TO_SIGMA = 1.4826  # of a normal distribution
SAMPLES_MIN = 8


@dataclass(frozen=True, slots=True)
class HumLine:
    """One mains line: where it is in truth, where it shows at this sample rate, and its amplitude."""

    true_hz: float
    seen_hz: float
    amplitude: float

    @property
    def aliased(self) -> bool:
        return abs(self.seen_hz - self.true_hz) > 0.01


@dataclass(frozen=True, slots=True)
class QuietRecord:
    """Figures of one stretch at rest; values in the signal's unit."""

    samples: int
    rate_hz: float
    mean: float
    rms: float
    sigma: float
    drift_per_min: float
    resolution: float
    distinct_values: int
    hum: tuple[HumLine, ...]


def quiet_record(time_s: Floats, value: Floats) -> QuietRecord:
    """Figures of (n,) samples at rest. Raises ValueError for fewer than 8 finite samples."""
    keep = np.isfinite(value)
    time_s, value = time_s[keep], value[keep]
    if len(value) < SAMPLES_MIN:
        raise ValueError(f"{len(value)} good samples; at least {SAMPLES_MIN} are needed")
    span_s = float(time_s[-1] - time_s[0])
    slope, offset = np.polyfit(time_s - time_s[0], value, 1)
    residual = value - (slope * (time_s - time_s[0]) + offset)
    rate_hz = (len(value) - 1) / span_s if span_s > 0 else 0.0
    levels = np.unique(value)
    return QuietRecord(
        samples=len(value),
        rate_hz=rate_hz,
        mean=float(value.mean()),
        rms=float(residual.std()),
        sigma=float(MAD_TO_SIGMA * np.median(np.abs(residual - np.median(residual)))),
        drift_per_min=float(slope * 60.0),
        resolution=float(np.diff(levels).min()) if len(levels) > 1 else 0.0,
        distinct_values=len(levels),
        hum=tuple(
            line for line in (hum_line(time_s, residual, hz, rate_hz) for hz in MAINS_HZ) if line is not None
        ),
    )


def alias_hz(true_hz: float, rate_hz: float) -> float:
    """Where a line shows when sampled at rate_hz: |f - fs round(f / fs)| (sampling theorem)."""
    return abs(true_hz - rate_hz * round(true_hz / rate_hz)) if rate_hz > 0 else true_hz


def hum_line(time_s: Floats, residual: Floats, true_hz: float, rate_hz: float) -> HumLine | None:
    """Least-squares amplitude of one line at the frequency where it shows (the Goertzel sum for uneven
    samples).
    """
    seen_hz = alias_hz(true_hz, rate_hz)
    span_s = float(time_s[-1] - time_s[0])
    if span_s * seen_hz < 2.0:
        return None  # fewer than two periods: not to be told from drift
    phase = 2.0 * np.pi * seen_hz * (time_s - time_s[0])
    table = np.column_stack((np.cos(phase), np.sin(phase)))
    weights, *_ = np.linalg.lstsq(table, residual, rcond=None)
    return HumLine(true_hz, seen_hz, float(np.hypot(*weights)))
