"""The bar as it stands in its fixture: places, deflected shape, moment, stress where it broke. Pure.

Places are counted in mm from the left support; a break is told from the bar's left end. Bernoulli-Euler beam under
symmetric loads (textbook): between support and loading roller v ~ x (3 a (L - a) - x^2), inside
v ~ a (3 x (L - x) - a^2).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from daq.cards.derived import fixture_by_name, mean_mm, median_strength_mpa, spans_of
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.mechanics.sections import Spans
from daq.mechanics.stress import moment_share
from daq.stream.block import Floats

OVERHANG_SHARE = 0.1  # of the support span on either side, where the length was not measured
EXAGGERATIONS = (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000)
SAG_SHARE = 0.5  # of the height: how far the bar is drawn to sag at the expected break,
SAG_SPAN_SHARE = 0.04  # and at most so much of the span
SHAPE_POINTS = 61


@dataclass(frozen=True, slots=True)
class Beam:
    """A bar in its fixture. load_mm 0: three rollers. sag_mm: mid deflection expected at the break."""

    support_mm: float
    load_mm: float
    roller_mm: float
    height_mm: float
    width_mm: float
    length_mm: float
    length_known: bool
    sag_mm: float
    at_bar: bool  # the measured deflection is the bar's mid-span, not the loading rollers'
    fixture: str = ""

    @property
    def arm_mm(self) -> float:
        """From a support to the next loading roller."""
        return (self.support_mm - self.load_mm) / 2.0

    @property
    def overhang_mm(self) -> float:
        return (self.length_mm - self.support_mm) / 2.0

    @property
    def loads_mm(self) -> tuple[float, ...]:
        """Loading rollers, from the left support."""
        return (self.arm_mm, self.support_mm - self.arm_mm) if self.load_mm else (self.support_mm / 2.0,)

    @property
    def exaggeration(self) -> int:
        """A round factor that makes the sag at the expected break about half the bar's height."""
        drawn_mm = min(SAG_SHARE * self.height_mm, SAG_SPAN_SHARE * self.support_mm)
        wanted = drawn_mm / self.sag_mm if self.sag_mm > 0 else 1.0
        return max((factor for factor in EXAGGERATIONS if factor <= wanted), default=1)

    @property
    def mid_per_measured(self) -> float:
        """Mid deflection for each mm of the measured one."""
        return 1.0 if self.at_bar else float(1.0 / shape(self, np.array([self.arm_mm]))[0])

    def from_left_end(self, place_mm: float) -> float:
        return place_mm + self.overhang_mm

    def from_left_support(self, end_mm: float) -> float:
        return end_mm - self.overhang_mm

    def is_inner(self, end_mm: float) -> bool:
        """Whether a break lies between the loading rollers (at mid-span within a roller for three-point)."""
        reach_mm = self.load_mm / 2.0 if self.load_mm else self.roller_mm / 2.0
        return abs(self.from_left_support(end_mm) - self.support_mm / 2.0) <= reach_mm

    def local_share(self, end_mm: float) -> float:
        """Stress at that place of the bar in parts of the highest."""
        from_mid_mm = self.from_left_support(end_mm) - self.support_mm / 2.0
        return float(moment_share(from_mid_mm, Spans(self.support_mm, self.load_mm)))


def shape(beam: Beam, place_mm: Floats) -> Floats:
    """Deflection at (n,) places from the left support, 1 at mid-span; straight beyond the supports."""
    span, arm = beam.support_mm, beam.arm_mm
    x = np.minimum(place_mm, span - place_mm)
    near = x * (3.0 * arm * (span - arm) - x**2)
    inner = arm * (3.0 * x * (span - x) - arm**2)
    beyond = x * 3.0 * arm * (span - arm)
    middle = arm * (0.75 * span**2 - arm**2)
    bent: Floats = np.where(x < 0, beyond, np.where(x <= arm, near, inner)) / middle
    return bent


def axis(beam: Beam) -> Floats:
    """Places at which the bar is drawn, from the left support."""
    return np.linspace(-beam.overhang_mm, beam.support_mm + beam.overhang_mm, SHAPE_POINTS)


def beam_of(frame: FrameCard, method: MethodCard, specimen: Specimen | None, fixture_name: str) -> Beam:
    """From the cards. Without a measured bar the method's nominal sizes stand in."""
    fixture = fixture_by_name(frame, fixture_name)
    if specimen is not None:
        height_mm = mean_mm(specimen.thickness_mm)
        width_mm = mean_mm(specimen.width_mm) if specimen.width_mm else height_mm
    else:
        height_mm = method.thickness_mm or method.diameter_mm or fixture.support_span_mm / 15.0
        width_mm = method.width_mm or height_mm
    measured_mm = specimen.length_mm if specimen is not None else None
    length_mm = measured_mm or fixture.support_span_mm * (1.0 + 2.0 * OVERHANG_SHARE)
    spans = spans_of(fixture)
    return Beam(
        support_mm=spans.support_mm,
        load_mm=spans.load_mm,
        roller_mm=fixture.roller_diameter_mm,
        height_mm=height_mm,
        width_mm=width_mm,
        length_mm=length_mm,
        length_known=measured_mm is not None,
        sag_mm=_sag_mm(method, height_mm, spans.support_mm, spans.load_mm),
        at_bar=_sensor_at_bar(frame),
        fixture=fixture.name,
    )


def beam_from_cards(
    frame: Mapping[str, Any], method: Mapping[str, Any], specimen: Mapping[str, Any] | None, fixture: str
) -> Beam:
    """From the cards as JSON. Raises CardError or ValueError where they do not read."""
    return beam_of(
        FrameCard.model_validate(frame, strict=False),
        MethodCard.model_validate(method, strict=False),
        Specimen.model_validate(specimen, strict=False) if specimen else None,
        fixture,
    )


def _sensor_at_bar(frame: FrameCard) -> bool:
    """The force's own link carries a deflection sensor: displacement then comes from it."""
    links = {channel.link for channel in frame.channels if channel.role == "force"}
    return any(channel.role == "deflection" and channel.link in links for channel in frame.channels)


def _sag_mm(method: MethodCard, height_mm: float, support_mm: float, load_mm: float) -> float:
    """Mid deflection at the expected median: stress = E h v'' / 2 gives sag = 2 s/(E h) (L^2/8 - a^2/6), the
    four-point formula with F replaced by the stress; a = L/2 for three-point.
    """
    arm = (support_mm - load_mm) / 2.0
    strain = median_strength_mpa(method) / (1e3 * method.expected.modulus_gpa)
    sag = 2.0 * strain / height_mm * (support_mm**2 / 8.0 - arm**2 / 6.0)
    return sag if math.isfinite(sag) else 0.0
