"""Bars that lie far from the others: flagged, never dropped. Why a bar is far off is a question for its pieces."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

BARS_MIN = 8
SCORE_MAX = 3.5  # Iglewicz and Hoaglin 1993: modified z-score (from memory)
SCALE = 0.6745  # of a normal distribution: median absolute deviation over standard deviation


@dataclass(frozen=True, slots=True)
class Outlier:
    """place: in the sequence given; score: modified z-score of ln strength, or percent off the mean where the method
    card gives such a limit."""

    place: int
    words: str


def outliers_of(
    strengths_mpa: Sequence[float], from_mean_percent_max: float | None = None
) -> tuple[Outlier, ...]:
    """By the method's own limit (percent of the mean), and by the modified z-score of ln strength from 8 bars on."""
    found: dict[int, str] = {}
    n = len(strengths_mpa)
    if from_mean_percent_max is not None and n >= 2:
        mean = math.fsum(strengths_mpa) / n
        for place, strength in enumerate(strengths_mpa):
            off = 100.0 * (strength / mean - 1.0)
            if abs(off) > from_mean_percent_max:
                found[place] = (
                    f"{off:+.1f} % from the mean; the method's limit is {from_mean_percent_max:g} %"
                )
    if n >= BARS_MIN:
        logs = [math.log(strength) for strength in strengths_mpa]
        middle = _median(logs)
        spread = _median([abs(value - middle) for value in logs])
        for place, value in enumerate(logs):
            score = SCALE * (value - middle) / spread if spread > 0 else 0.0
            if abs(score) > SCORE_MAX:
                found.setdefault(place, f"modified z-score {score:+.1f} of ln strength, beyond {SCORE_MAX:g}")
    return tuple(Outlier(place, found[place]) for place in sorted(found))


def _median(values: Sequence[float]) -> float:
    ordered = sorted(values)
    return (ordered[(len(ordered) - 1) // 2] + ordered[len(ordered) // 2]) / 2.0
