"""Where a bar broke, against its rollers: which part of the span, and the nominal stress that was there.

Positions are from mid-span, right positive, on the tension face. Statics only; whether such a break counts is the
method's rule (daq.results.verdict).
"""

from __future__ import annotations

from dataclasses import dataclass

from daq.mechanics.sections import Spans
from daq.mechanics.stress import moment_share


@dataclass(frozen=True, slots=True)
class BreakPlace:
    """outside_mm: beyond the nearest load roller (from mid-span in three-point), 0 inside the load span.

    share: nominal stress there over the highest; support_distance_mm: to the nearest support.
    """

    from_mid_mm: float
    outside_mm: float
    outside_share: float
    share: float
    support_distance_mm: float

    @property
    def inside(self) -> bool:
        """Inside the load span, its rollers included; in three-point only at mid-span itself."""
        return self.outside_mm == 0.0


def break_place(from_mid_mm: float, spans: Spans) -> BreakPlace:
    """ValueError with one clear line for a place beyond the supports, where no bar breaks in bending."""
    half_mm = spans.support_mm / 2.0
    if not abs(from_mid_mm) <= half_mm:
        raise ValueError(
            f"break position {from_mid_mm:g} mm from mid-span: between {-half_mm:g} and {half_mm:g} mm (the supports);"
            " measure again, right of mid-span is positive"
        )
    outside_mm = max(abs(from_mid_mm) - spans.load_mm / 2.0, 0.0)
    return BreakPlace(
        from_mid_mm=from_mid_mm,
        outside_mm=outside_mm,
        outside_share=outside_mm / spans.support_mm,
        share=float(moment_share(from_mid_mm, spans)),
        support_distance_mm=half_mm - abs(from_mid_mm),
    )


def from_mid_of_left_mm(from_left_mm: float, length_mm: float) -> float:
    """A reading from the bar's left end, the bar lying with equal overhangs. ValueError for a place off the bar."""
    if not 0.0 <= from_left_mm <= length_mm:
        raise ValueError(
            f"break position {from_left_mm:g} mm from the left end: 0 to {length_mm:g} mm, the bar's length"
        )
    return from_left_mm - length_mm / 2.0


def local_stress_mpa(
    nominal_mpa: float, place: BreakPlace, depth_mm: float, depth_from_face_mm: float = 0.0
) -> float:
    """Nominal stress at an origin: moment there over the highest, and linear through the depth from the tension face.

    Negative beyond the neutral axis. Elementary beam; for information and size effects, never the strength itself.
    """
    return nominal_mpa * place.share * (1.0 - 2.0 * depth_from_face_mm / depth_mm)
