"""Break map: where along the bar the primary breaks lie. Uneven moments and pin damage show here, not
in strength.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from daq.mechanics.sections import Spans

CAUTION_P = 0.01
CAUTION_BARS = 10


@dataclass(frozen=True, slots=True)
class BreakMap:
    """Breaks left and right of mid-span (those on it belong to neither), outside the load span, near
    a load roller.
    """

    left: int
    right: int
    outside_load_span: int
    near_roller: int
    n: int
    p_one_sided: float

    @property
    def caution(self) -> bool:
        """At least ten bars and p < 0.01 (trade judgement, no source)."""
        return self.left + self.right >= CAUTION_BARS and self.p_one_sided < CAUTION_P

    @property
    def near_roller_share(self) -> float:
        return self.near_roller / self.n if self.n else math.nan


def break_map(from_mid_mm: Sequence[float], spans: Spans, roller_diameter_mm: float) -> BreakMap:
    """Positions from mid-span, right positive. Near: within one roller diameter of a load roller."""
    half_mm = spans.load_mm / 2.0
    left, right = sum(x < 0 for x in from_mid_mm), sum(x > 0 for x in from_mid_mm)
    return BreakMap(
        left=left,
        right=right,
        outside_load_span=sum(abs(x) > half_mm for x in from_mid_mm),
        near_roller=sum(abs(abs(x) - half_mm) <= roller_diameter_mm for x in from_mid_mm),
        n=len(from_mid_mm),
        p_one_sided=two_sided_binomial(max(left, right), left + right),
    )


def two_sided_binomial(more: int, n: int) -> float:
    """Probability of a split at least this uneven where both sides are equally likely, exact; 1
    without a bar.
    """
    tail = sum(math.comb(n, k) for k in range(max(more, n - more), n + 1))
    return min(1.0, 2.0 * tail / 2.0**n)
