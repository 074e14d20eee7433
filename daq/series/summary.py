"""Mean, spread and order statistics of the bars that broke. Scatter of bars, not uncertainty of
measurement.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Summary:
    """spread_mpa: standard deviation with n - 1; None below two bars."""

    n: int
    mean_mpa: float
    spread_mpa: float | None
    median_mpa: float
    min_mpa: float
    max_mpa: float

    @property
    def variation(self) -> float | None:
        return None if self.spread_mpa is None else self.spread_mpa / self.mean_mpa

    @property
    def u_mean_mpa(self) -> float | None:
        """Standard error of the mean from the scatter alone."""
        return None if self.spread_mpa is None else self.spread_mpa / math.sqrt(self.n)


def summary_of(strengths_mpa: Sequence[float]) -> Summary | None:
    """None without a bar."""
    if not strengths_mpa:
        return None
    n, ordered = len(strengths_mpa), sorted(strengths_mpa)
    mean = math.fsum(ordered) / n
    spread = math.sqrt(math.fsum((s - mean) ** 2 for s in ordered) / (n - 1)) if n > 1 else None
    median = (ordered[(n - 1) // 2] + ordered[n // 2]) / 2.0
    return Summary(n, mean, spread, median, ordered[0], ordered[-1])
