"""The rollers' own local stress at the opposite face, where beam theory is not the whole truth.

Source: the exact plane-elastic strip under a line load (Filon; von Karman and Seewald), computed for this
project by Fourier integral and confirmed by finite elements. The textbook's k = 0.1773
comes from 1927 numerics and differs by 0.003 h/L. Never applied by default: the nominal stress stays
nominal.
"""

from __future__ import annotations

import numpy as np

from daq.mechanics.quantity import Floats
from daq.mechanics.sections import Rectangle, Spans
from daq.mechanics.strip import local_beta

WEDGE_POINT = 0.1742553  # k of a line load
WEDGE_PATCH = 0.30  # added times (w/h)^2 for contact width w; finite-element fit, w/h <= 0.3
INBOARD_PEAK = 0.06791  # four-point: highest stress, 0.375 h inboard of each load roller
UNDER_LOAD_ROLLER = -0.08713  # four-point: directly opposite a load roller


def wedge_coefficient(depth_mm: float, contact_width_mm: float = 0.0) -> float:
    """k of a patch of width w: 0.17426 + 0.30 (w/h)^2."""
    assert 0 <= contact_width_mm <= 0.3 * depth_mm
    return WEDGE_POINT + WEDGE_PATCH * (contact_width_mm / depth_mm) ** 2


def three_point_ratio(depth_mm: float, support_span_mm: float, contact_width_mm: float = 0.0) -> float:
    """True over nominal stress at mid-span, three-point: 1 - k h/L."""
    return 1.0 - wedge_coefficient(depth_mm, contact_width_mm) * depth_mm / support_span_mm


def four_point_peak_ratio(depth_mm: float, spans: Spans) -> float:
    """Highest true stress over nominal in four-point; it lies 0.375 h inboard of each load roller."""
    assert spans.load_mm > 0
    return 1.0 + INBOARD_PEAK * depth_mm / (spans.support_mm - spans.load_mm)


def four_point_roller_ratio(depth_mm: float, spans: Spans) -> float:
    """True over nominal stress directly opposite a load roller."""
    assert spans.load_mm > 0
    return 1.0 + UNDER_LOAD_ROLLER * depth_mm / (spans.support_mm - spans.load_mm)


def roller_stress_mpa(
    from_mid_mm: float | Floats, force_n: float, section: Rectangle, spans: Spans, from_face_mm: float = 0.0
) -> Floats:
    """What the load roller(s) add to the beam stress along the bar, at a depth below the tension face.

    Line loads; 1e-5 of F/(b c) or better, down from the tension face to three quarters of the depth.
    """
    half_mm = section.thickness_mm / 2.0
    across = from_face_mm / half_mm - 1.0
    x_mm = np.asarray(from_mid_mm, dtype=np.float64)
    places_mm = (-spans.load_mm / 2.0, spans.load_mm / 2.0) if spans.load_mm > 0 else (0.0,)
    roller_n = force_n / len(places_mm)
    beta = sum(
        (local_beta((x_mm - place_mm) / half_mm, across) for place_mm in places_mm), np.zeros_like(x_mm)
    )
    return np.asarray(beta * roller_n / (section.width_mm * half_mm), dtype=np.float64)
