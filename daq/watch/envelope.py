"""Usable envelope: can a break be seen with this noise, rate and lag, and its peak measured. Tells only.

Trade judgement, no source (peak/noise >= 100, >= 50 samples before the break, lag < 2 % of the time to break) and
the sampling gate: (sample interval/2 + lag)/time to break below 0.1 % green, below 0.5 % caution, else
block.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

PEAK_TO_NOISE_MIN = 100.0
SAMPLES_MIN = 50.0
LAG_SHARE_MAX = 0.02
GREEN, CAUTION = 0.001, 0.005


class Gate(Enum):
    GREEN = "green"
    CAUTION = "caution"
    BLOCK = "block"
    LAG_UNKNOWN = "lag not known"


@dataclass(frozen=True, slots=True)
class Envelope:
    """detects: every need is met. budget: relative bias of a raw maximum from sampling and lag."""

    detects: bool
    reasons: tuple[str, ...]
    budget: float
    gate: Gate


def usable(
    *,
    peak_n: float,
    sigma_n: float,
    rate_hz: float,
    time_to_break_s: float,
    lag_s: float | None,
    arm_n: float,
) -> Envelope:
    """The statement for one plan. lag_s None: not known, counted as nothing but said."""
    reasons = []
    if not peak_n >= PEAK_TO_NOISE_MIN * sigma_n:
        reasons.append(f"peak is {peak_n / sigma_n:.0f} times the noise, {PEAK_TO_NOISE_MIN:.0f} are needed")
    if not time_to_break_s * rate_hz >= SAMPLES_MIN:
        reasons.append(
            f"{time_to_break_s * rate_hz:.0f} samples before the break, {SAMPLES_MIN:.0f} are needed"
        )
    if lag_s is not None and not lag_s < LAG_SHARE_MAX * time_to_break_s:
        reasons.append(f"lag is {100 * lag_s / time_to_break_s:.1f} % of the time to break, 2 % is the most")
    if not peak_n > 2.0 * arm_n:
        reasons.append(f"the watch arms at {arm_n:.3g} N, too near to the expected {peak_n:.3g} N")
    budget = (0.5 / rate_hz + (lag_s or 0.0)) / time_to_break_s
    return Envelope(not reasons, tuple(reasons), budget, _gate(budget, lag_s))


def _gate(budget: float, lag_s: float | None) -> Gate:
    if not budget < CAUTION:
        return Gate.BLOCK
    if lag_s is None:
        return Gate.LAG_UNKNOWN
    return Gate.GREEN if budget < GREEN else Gate.CAUTION
