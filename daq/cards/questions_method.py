"""Slips of a method card: mm/s for mm/min, inch, psi, kN, and a bar that would break at the wrong time."""

from __future__ import annotations

import math
from collections.abc import Iterator

from daq.cards.derived import (
    Spans,
    bar_stiffness_n_mm,
    fixture_by_name,
    frame_stiffness_n_mm,
    geometry_of,
    median_load_n,
    median_strength_mpa,
    nominal_section,
    spans_of,
)
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.slips import Slip

# Judgement of the trade, wide enough that a common method is never asked.
BREAK_S_MIN, BREAK_S_MAX = 0.5, 1000.0
TIME_SLACK = 3.0  # a bar may break this much earlier or later than the card's band
SLENDERNESS_MAX = 60.0
STRENGTH_SHARE_MIN, STRENGTH_SHARE_MAX = 2e-5, 1e-2  # of Young's modulus
PSI_PER_MPA = 145.0377
CHAMFER_SHARE_MAX = 0.1
# (factor that mends the rate, what it was typed in); the first that gives a believable time is offered.
RATE_SLIPS = {
    "crosshead": (
        (60.0, "mm/s"),
        (1 / 60.0, "mm/h"),
        (25.4, "inch/min"),
        (10.0, "cm/min"),
        (0.001, "um/min"),
    ),
    "force": ((1 / 60.0, "N/min"), (1000.0, "kN/s"), (1000.0 / 60.0, "kN/min")),
    "stress": ((1 / 60.0, "MPa/min"), (1 / PSI_PER_MPA, "psi/s"), (1 / 60.0 / PSI_PER_MPA, "psi/min")),
}
RATE_KEY = {
    "crosshead": ("speed_mm_min", "mm/min"),
    "force": ("rate_n_s", "N/s"),
    "stress": ("rate_mpa_s", "MPa/s"),
}


def method_slips(frame: FrameCard, method: MethodCard, fixture: str | None = None) -> Iterator[Slip]:
    """Every value of a method card that looks like a slip on this frame."""
    spans, name = geometry_of(method), fixture or ""
    if any(item.name == name for item in frame.fixtures):
        spans = spans_of(fixture_by_name(frame, name))
    yield from _strength_slips(method)
    yield from _section_slips(method, spans)
    yield from _time_slips(method, break_time_s(frame, method, spans, name))
    yield from _force_slips(method, spans)
    if frame.motion is not None:
        seating, approach = method.preload.seating_mm_min, frame.motion.approach_mm_min
        if seating is not None and seating > approach:
            text = f"seating faster than the approach of {approach:g} mm/min"
            yield Slip(
                "preload.seating_mm_min", f"{seating:g}", text, "seat at the test rate or slower", True
            )


def break_time_s(frame: FrameCard, method: MethodCard, spans: Spans, fixture: str) -> float:
    """Time from contact to the median break: deflection of bar and frame over speed, or load over rate."""
    load_n, rate = median_load_n(method, spans), method.rate
    if rate.mode == "force":
        assert rate.rate_n_s is not None
        return load_n / rate.rate_n_s
    if rate.mode == "stress":
        assert rate.rate_mpa_s is not None
        return median_strength_mpa(method) / rate.rate_mpa_s
    assert rate.speed_mm_min is not None
    bar = bar_stiffness_n_mm(method.expected.modulus_gpa, nominal_section(method), spans)
    travel_mm = load_n / bar + load_n / frame_stiffness_n_mm(frame, fixture)
    return travel_mm / (rate.speed_mm_min / 60.0)


def _time_slips(method: MethodCard, time_s: float) -> Iterator[Slip]:
    low_s, high_s = method.time_to_break_s or (BREAK_S_MIN, BREAK_S_MAX)
    if low_s / TIME_SLACK <= time_s <= high_s * TIME_SLACK:
        return
    key, unit = RATE_KEY[method.rate.mode]
    value = getattr(method.rate, key)
    text = f"the median bar would break after {time_s:.3g} s, expected {low_s:g} to {high_s:g} s"
    do = "check rate, dimensions, span and expected strength"
    for factor, typed in RATE_SLIPS[method.rate.mode]:
        if low_s <= time_s / factor <= high_s:
            do = f"if it is in {typed}, it is {value * factor:.4g} {unit}"
            break
    yield Slip(f"rate.{key}", f"{value:g}", text, do)


def _strength_slips(method: MethodCard) -> Iterator[Slip]:
    strength, modulus_mpa = method.expected.strength_mpa, 1e3 * method.expected.modulus_gpa
    share = strength / modulus_mpa
    if share > STRENGTH_SHARE_MAX:
        text = f"{100 * share:.2g} % of Young's modulus is more than brittle bars bear"
        do = f"if it is in psi, it is {strength / PSI_PER_MPA:.4g} MPa; check modulus_gpa too"
        yield Slip("expected.strength_mpa", f"{strength:g}", text, do)
    if share < STRENGTH_SHARE_MIN:
        text = f"{100 * share:.2g} % of Young's modulus is very little"
        do = f"if it is in GPa, it is {1e3 * strength:g} MPa; in ksi, {1e3 * strength / PSI_PER_MPA:.4g} MPa"
        yield Slip("expected.strength_mpa", f"{strength:g}", text, do)


def _section_slips(method: MethodCard, spans: Spans) -> Iterator[Slip]:
    size = nominal_section(method)
    key = "thickness_mm" if method.section == "rectangle" else "diameter_mm"
    slenderness = spans.support_mm / size.thickness_mm
    if slenderness > SLENDERNESS_MAX:
        text = f"the span is {slenderness:.3g} times the thickness, more than {SLENDERNESS_MAX:g}"
        h_mm = size.thickness_mm
        do = f"if it is in inch, it is {25.4 * h_mm:.4g} mm; in cm, {10.0 * h_mm:.4g} mm"
        yield Slip(key, f"{size.thickness_mm:g}", text, do)
    if size.chamfer_mm > CHAMFER_SHARE_MAX * size.thickness_mm:
        text = f"more than a tenth of the thickness of {size.thickness_mm:g} mm"
        yield Slip("chamfer_mm", f"{size.chamfer_mm:g}", text, f"{size.chamfer_mm / 10.0:g} mm was meant?")
    if method.dimension_u_mm > 0.05 * size.thickness_mm:
        text = f"more than 5 % of the thickness of {size.thickness_mm:g} mm"
        do = f"if it is in um, it is {method.dimension_u_mm / 1e3:g} mm"
        yield Slip("dimension_u_mm", f"{method.dimension_u_mm:g}", text, do)


def _force_slips(method: MethodCard, spans: Spans) -> Iterator[Slip]:
    limit_n, median_n = method.limits.force_n_max, median_load_n(method, spans)
    if limit_n is None or limit_n > median_n or not math.isfinite(median_n):
        return
    text = f"half of the bars would not break below this; the median is {median_n:.4g} N"
    do = f"if it is in kN, it is {1e3 * limit_n:g} N"
    yield Slip("limits.force_n_max", f"{limit_n:g}", text, do)
