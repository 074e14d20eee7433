"""The quiet record names noise, drift and mains lines, aliased ones too."""

from __future__ import annotations

import numpy as np
import pytest

from daq.results.quiet import alias_hz, quiet_record


def signal(rate_hz: float, seconds: float, *, sigma: float, hum: float = 0.0, drift_per_s: float = 0.0):
    time_s = np.arange(0, seconds, 1 / rate_hz)
    noise = np.random.default_rng(1).normal(0, sigma, len(time_s))
    return time_s, 5.0 + noise + hum * np.sin(2 * np.pi * 50.0 * time_s + 0.3) + drift_per_s * time_s


def test_noise_and_drift() -> None:
    quiet = quiet_record(*signal(1000.0, 10.0, sigma=0.15, drift_per_s=0.05))
    assert quiet.rate_hz == pytest.approx(1000.0, rel=1e-6)
    assert quiet.sigma == pytest.approx(0.15, rel=0.05)
    assert quiet.drift_per_min == pytest.approx(3.0, rel=0.05)


@pytest.mark.parametrize(("rate_hz", "seen_hz"), [(1000.0, 50.0), (80.0, 30.0)])
def test_hum_is_named_with_true_and_seen_frequency(rate_hz: float, seen_hz: float) -> None:
    """Acceptance scenario 4: 2 N of 50 Hz at 80 S/s shows as 30 Hz."""
    quiet = quiet_record(*signal(rate_hz, 5.0, sigma=0.4, hum=2.0))
    line = next(line for line in quiet.hum if line.true_hz == 50.0)
    assert line.seen_hz == pytest.approx(seen_hz, abs=0.1)
    assert line.amplitude == pytest.approx(2.0, rel=0.1)


@pytest.mark.parametrize(
    ("true", "rate", "seen"), [(50, 80, 30), (60, 100, 40), (50, 49.5, 0.5), (50, 1000, 50)]
)
def test_alias(true: float, rate: float, seen: float) -> None:
    """|f - fs round(f/fs)|, worked out by hand."""
    assert alias_hz(true, rate) == pytest.approx(seen)


def test_too_little_is_said() -> None:
    with pytest.raises(ValueError, match="at least 8"):
        quiet_record(np.arange(5.0), np.zeros(5))
