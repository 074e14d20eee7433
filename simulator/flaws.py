"""Flaws of a bar: where they sit, how strong they are, which one ends the bar. The generator is an argument.

A population is a Poisson field over the tensile side: in a region of uniform stress s and size M the number
of flaws weaker than s is (M/M_ref) (s/s0)^m, so that strength, size effect and break position come out of one
drawing (Weibull's weakest link). Flaws are drawn from the weakest up until no stronger one can matter: exact.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TypeAlias

import numpy as np

from daq.mechanics.sections import Circle, Rectangle, Section, Spans
from simulator.card import Flaws, Reference, Where

Corners: TypeAlias = tuple[tuple[float, float], ...]

FLAWS_MAX = 100_000  # a population that needs more than this per bar is a card error in disguise


@dataclass(frozen=True, slots=True)
class Weakest:
    """The flaw that ends the bar. nominal_mpa: beam stress at the break; x_mm: from the middle, right +."""

    population: str
    nominal_mpa: float
    strength_mpa: float
    x_mm: float


@dataclass(frozen=True, slots=True)
class MomentShape:
    """Bending moment along the bar, relative to the nominal maximum; load rollers may sit off the middle."""

    spans: Spans
    load_offset_mm: float = 0.0

    @property
    def corners(self) -> Corners:
        """(x from the middle, share) at supports and load rollers; straight lines between (statics)."""
        half, e, inner = self.spans.support_mm / 2, self.load_offset_mm, self.spans.load_mm / 2
        full = self.spans.support_mm * self.spans.arm_mm
        left = 2 * (half - e) * (half + e - inner) / full
        right = 2 * (half + e) * (half - e - inner) / full
        return ((-half, 0.0), (e - inner, left), (e + inner, right), (half, 0.0))

    def share(self, x_mm: float) -> float:
        return _between(self.corners, x_mm)


def effective_size(where: Where, section: Section, spans: Spans, modulus: float) -> float:
    """Length, area or volume that would fail alike under uniform stress."""
    m = modulus
    along_mm = (spans.support_mm + m * spans.load_mm) / (m + 1)
    if isinstance(section, Rectangle):
        b, h = section.width_mm, section.thickness_mm
        across = {"face": b, "surface": b + h / (m + 1), "edges": 2.0, "volume": b * h / (2 * (m + 1))}
        return along_mm * across[where]
    d = section.diameter_mm
    ratio = math.exp(math.lgamma((m + 1) / 2) - math.lgamma(m / 2 + 1)) / math.sqrt(math.pi)
    if where == "volume":
        return along_mm * math.pi * d**2 / 4 * ratio / (m + 2)
    return along_mm * math.pi * d * ratio / 2


def tensile_size(where: Where, section: Section, spans: Spans) -> float:
    """Length, area or volume of the tensile side between the supports."""
    if isinstance(section, Rectangle):
        b, h = section.width_mm, section.thickness_mm
        across = {"face": b, "surface": b + h, "edges": 2.0, "volume": b * h / 2}
        return spans.support_mm * across[where]
    d = section.diameter_mm
    return spans.support_mm * (math.pi * d**2 / 8 if where == "volume" else math.pi * d / 2)


def draw_weakest(
    populations: Sequence[Flaws], section: Section, shape: MomentShape, rng: np.random.Generator
) -> Weakest | None:
    """The flaw that ends this bar; None for a bar without flaws."""
    best: Weakest | None = None
    for flaws in populations:
        best = _weaker(flaws, section, shape, rng, best)
    return best


def _weaker(
    flaws: Flaws, section: Section, shape: MomentShape, rng: np.random.Generator, best: Weakest | None
) -> Weakest | None:
    m = flaws.weibull_modulus
    reference = effective_size(flaws.where, *_reference(flaws.reference, section), m)
    ratio = reference / tensile_size(flaws.where, section, shape.spans)
    corners = shape.corners
    share_max = max(share for _, share in corners)
    hazard = 0.0
    for _ in range(FLAWS_MAX):
        hazard += rng.exponential()
        strength_mpa = flaws.strength_mpa * (hazard * ratio) ** (1 / m)
        if best is not None and strength_mpa >= best.nominal_mpa * share_max:
            break
        x_mm = shape.spans.support_mm * (rng.random() - 0.5)
        share = _between(corners, x_mm) * _depth_share(flaws.where, section, rng)
        if share > 0 and (best is None or strength_mpa / share < best.nominal_mpa):
            best = Weakest(flaws.name, strength_mpa / share, strength_mpa, x_mm)
    return best


def _between(corners: Corners, x_mm: float) -> float:
    """Straight lines between corners; plain, because it is asked thousands of times for one place."""
    for (left_mm, left), (right_mm, right) in pairwise(corners):
        if x_mm <= right_mm:
            width_mm = right_mm - left_mm
            return left + (right - left) * (x_mm - left_mm) / width_mm if width_mm > 0 else right
    return corners[-1][1]


def _reference(reference: Reference, like: Section) -> tuple[Section, Spans]:
    """The reference bar has the section kind of the bar at hand."""
    spans = Spans(reference.support_span_mm, reference.load_span_mm)
    if isinstance(like, Rectangle):
        return Rectangle(reference.width_mm, reference.thickness_mm), spans
    return Circle(reference.thickness_mm), spans


def _depth_share(where: Where, section: Section, rng: np.random.Generator) -> float:
    """Stress at a random place of the cross-section's tensile side over that of the outer fibre."""
    if where in ("face", "edges") and isinstance(section, Rectangle):
        return 1.0
    if isinstance(section, Rectangle):
        around_mm = section.width_mm + section.thickness_mm
        on_face = where == "surface" and rng.random() * around_mm < section.width_mm
        return 1.0 if on_face else rng.random()
    if where == "volume":
        while True:
            depth = rng.random()
            if rng.random() ** 2 <= 1 - depth**2:
                return depth
    return math.cos(math.pi * (rng.random() - 0.5))
