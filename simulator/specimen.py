"""A bar as it really is: sizes, stiffness, stress per newton, the flaw that ends it. No time, no motion."""

from __future__ import annotations

import zlib
from dataclasses import dataclass
from typing import Annotated

import numpy as np
from pydantic import Field

from daq.cards.base import Card, FileName, NotNegative, Positive, about
from daq.cards.frame import Fixture
from daq.mechanics.deflection import (
    load_point_stiffness_n_mm,
    mid_stiffness_n_mm,
    shear_share_load_point,
    shear_share_mid,
)
from daq.mechanics.edges import chamfer_factor
from daq.mechanics.friction import friction_share_max
from daq.mechanics.sections import Circle, Rectangle, Section, Spans, Tube, section_modulus_mm3
from simulator.card import BarCard, Contact
from simulator.flaws import MomentShape, Weakest, draw_weakest

Readings = Positive | tuple[Positive, ...]


class InHand(Card):
    """A bar about to be mounted. What is left out comes from the card; a sheet's row fits as it is."""

    number: Annotated[FileName, about("", "number of the bar; the same number is always the same bar")]
    width_mm: Annotated[Readings | None, about("mm", "width, or readings of it")] = None
    thickness_mm: Annotated[Readings | None, about("mm", "thickness or diameter, or readings of it")] = None
    inner_diameter_mm: Annotated[NotNegative | None, about("mm", "bore of a tube")] = None
    chamfer_mm: Annotated[NotNegative | None, about("mm", "leg of the chamfers")] = None
    strength_mpa: Annotated[
        Positive | None, about("MPa", "stress at the break, instead of the drawn one")
    ] = None
    break_at_mm: Annotated[
        float | None, about("mm", "place of the break from the middle, instead of the drawn one")
    ] = None
    strength_factor: Annotated[Positive, about("", "the strength is multiplied by this: a trend")] = 1.0
    length_mm: Annotated[Positive | None, about("mm", "of no meaning here")] = None
    batch: Annotated[str, Field(max_length=80), about("", "of no meaning here")] = ""
    note: Annotated[str, Field(max_length=400), about("", "of no meaning here")] = ""


@dataclass(frozen=True, slots=True)
class Bar:
    """A bar in its fixture."""

    number: str
    section: Section
    stiffness_n_mm: float  # force over travel of the load rollers, shear included
    mid_per_n: float  # deflection of the middle, mm per N
    stress_per_n: float  # true stress of the outer fibre between the load rollers, MPa per N
    modulus_mpa: float
    weakest: Weakest | None

    @property
    def break_n(self) -> float:
        """Force at which the flaw gives; infinite for a bar that never breaks."""
        return float("inf") if self.weakest is None else self.weakest.nominal_mpa / self.stress_per_n


def make_bar(hand: InHand, card: BarCard, contact: Contact, fixture: Fixture, seed: int) -> Bar:
    """The same number with the same seed is always the same bar, whatever was broken before."""
    name = zlib.crc32(hand.number.encode())
    section = _section(hand, card, np.random.default_rng((seed, name, 0)))
    rng = np.random.default_rng((seed, name, 1))
    spans = Spans(fixture.support_span_mm, fixture.load_span_mm)
    edges = 1.0
    chamfer_mm = card.chamfer_mm if hand.chamfer_mm is None else hand.chamfer_mm
    if isinstance(section, Rectangle):
        edges = chamfer_factor(section, chamfer_mm)
    lost = friction_share_max(section, spans, contact.friction)
    weakest = _weakest(hand, card, section, MomentShape(spans, contact.load_offset_mm), rng)
    modulus_mpa = card.modulus_gpa * 1000
    return Bar(
        number=hand.number,
        section=section,
        stiffness_n_mm=_stiffness_n_mm(section, spans, card, edges) / (1 - lost),
        mid_per_n=_mid_per_n(section, spans, card, edges) * (1 - lost),
        stress_per_n=spans.arm_mm / (2 * section_modulus_mm3(section)) * edges * (1 - lost),
        modulus_mpa=modulus_mpa,
        weakest=weakest,
    )


def _stiffness_n_mm(section: Section, spans: Spans, card: BarCard, edges: float) -> float:
    kappa = section.shear_coefficient(card.poisson_ratio)
    shear = shear_share_load_point(section, spans, card.poisson_ratio, kappa)
    return load_point_stiffness_n_mm(card.modulus_gpa * 1000, section, spans) / (edges + shear)


def _mid_per_n(section: Section, spans: Spans, card: BarCard, edges: float) -> float:
    kappa = section.shear_coefficient(card.poisson_ratio)
    shear = shear_share_mid(section, spans, card.poisson_ratio, kappa)
    return (edges + shear) / mid_stiffness_n_mm(card.modulus_gpa * 1000, section, spans)


def _weakest(
    hand: InHand, card: BarCard, section: Section, shape: MomentShape, rng: np.random.Generator
) -> Weakest | None:
    if hand.strength_mpa is not None:
        x_mm = hand.break_at_mm or 0.0
        nominal_mpa = hand.strength_mpa * hand.strength_factor
        return Weakest("given", nominal_mpa, nominal_mpa * shape.share(x_mm), x_mm)
    drawn = draw_weakest(card.flaws, section, shape, rng)
    if drawn is None:
        return None
    factor = hand.strength_factor
    x_mm = drawn.x_mm if hand.break_at_mm is None else hand.break_at_mm
    return Weakest(drawn.population, drawn.nominal_mpa * factor, drawn.strength_mpa * factor, x_mm)


def _section(hand: InHand, card: BarCard, rng: np.random.Generator) -> Section:
    thickness_mm = _mean(hand.thickness_mm) or _scattered(card.thickness_mm, card.scatter_mm, rng)
    if card.section == "rectangle":
        assert card.width_mm is not None
        width_mm = _mean(hand.width_mm) or _scattered(card.width_mm, card.scatter_mm, rng)
        return Rectangle(width_mm, thickness_mm)
    if card.section == "circle":
        return Circle(thickness_mm)
    inner_mm = card.inner_diameter_mm if hand.inner_diameter_mm is None else hand.inner_diameter_mm
    return Tube(thickness_mm, inner_mm)


def _mean(readings: float | tuple[float, ...] | None) -> float:
    """0 where there are none."""
    if readings is None or readings == ():
        return 0.0
    return sum(readings) / len(readings) if isinstance(readings, tuple) else readings


def _scattered(nominal_mm: float, half_width_mm: float, rng: np.random.Generator) -> float:
    return nominal_mm + half_width_mm * (2 * rng.random() - 1)
