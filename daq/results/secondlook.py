"""Second look: what may be wrong with a bar whose stiffness is off - the ranked explanations.

Each slip changes the modulus by a factor that elementary beam theory gives; the one nearest to what was seen comes
first. It explains and asks; it never corrects.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from daq.mechanics.sections import Rectangle, Section, Spans

BAND = 0.15  # of the series' median; trade judgement, no source
SIGMAS = 4.0  # or so many robust standard deviations of the series, whichever is wider
BARS_MIN = 3  # fewer have no median worth the name
NEAR = 0.12  # of ln ratio: an explanation further off is none


@dataclass(frozen=True, slots=True)
class Explanation:
    """ratio: apparent over true modulus if this is what went wrong."""

    text: str
    ratio: float


def off_by(modulus: float, others: list[float]) -> float | None:
    """Ratio to the median of the other bars where it is off by more than 15 % and 4 robust sigma; else None."""
    if len(others) < BARS_MIN:
        return None
    ordered = sorted(others)
    median = _median(ordered)
    spread = 1.4826 * _median(sorted(abs(value - median) for value in ordered))
    ratio = modulus / median
    return ratio if abs(ratio - 1.0) > max(BAND, SIGMAS * spread / median) else None


def _median(ordered: list[float]) -> float:
    return (ordered[(len(ordered) - 1) // 2] + ordered[len(ordered) // 2]) / 2.0


def explanations(ratio: float, section: Section | None, spans: Spans | None) -> tuple[Explanation, ...]:
    """Nearest first; at most three, none where nothing simple comes near."""
    if not ratio > 0:
        return ()
    near = [one for one in _slips(section, spans) if abs(math.log(ratio / one.ratio)) <= NEAR]
    return tuple(sorted(near, key=lambda one: abs(math.log(ratio / one.ratio)))[:3])


def _slips(section: Section | None, spans: Spans | None) -> Iterator[Explanation]:
    """Apparent over true modulus: E goes with L^3/(b h^3), and with a^2(3L-4a)/(b h^3) at the load rollers."""
    yield Explanation("support span on the card twice the true one", 8.0)
    yield Explanation("support span on the card half the true one", 1.0 / 8.0)
    if isinstance(section, Rectangle) and section.width_mm != section.thickness_mm:
        yield Explanation("width and height swapped", (section.width_mm / section.thickness_mm) ** 2)
    if spans is not None and spans.load_mm == 0:
        yield Explanation("quarter-point loading taken for three-point", 2.0)
    elif spans is not None:
        arm_mm, span_mm = spans.arm_mm, spans.support_mm
        ratio = 4.0 * arm_mm**2 * (3.0 * span_mm - 4.0 * arm_mm) / span_mm**3
        yield Explanation("three-point loading taken for four-point", ratio)
    for percent in (-10, -5, 5, 10):
        word = "small" if percent < 0 else "large"
        yield Explanation(f"height about {abs(percent)} % too {word}", (1.0 + percent / 100.0) ** -3)
