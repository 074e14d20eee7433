"""Gauge stress by Hooke's law beside the beam formula, and why they differ: each reason a factor of its own.

The factors are expectations of this bar and gauge; what they do not explain is the remainder, which is a finding, never
a correction. The nominal stress is left as it is.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from daq.mechanics.edges import chamfer_factor
from daq.mechanics.friction import friction_share_max
from daq.mechanics.gauges import gauge_mean_share, gauge_roller_share
from daq.mechanics.sections import Rectangle, Section, Spans
from daq.mechanics.stress import beam_stress_mpa, moment_share

ROUNDING = 1e-12
STRIP_ERROR = 2e-6  # of the strip solution: smaller parts are not told


@dataclass(frozen=True, slots=True)
class Reason:
    """Expected gauge stress over nominal stress, for one cause alone."""

    name: str
    factor: float


@dataclass(frozen=True, slots=True)
class Comparison:
    """remainder: measured over expected, less 1: modulus, gauge factor, load, spans, alignment, or friction.

    friction_share: the remainder may be as low as minus this where rollers do not roll.
    """

    gauge_mpa: float
    nominal_mpa: float
    reasons: tuple[Reason, ...]
    friction_share: float

    @property
    def expected_mpa(self) -> float:
        return self.nominal_mpa * math.prod(reason.factor for reason in self.reasons)

    @property
    def difference(self) -> float:
        """Gauge over nominal, less 1."""
        return self.gauge_mpa / self.nominal_mpa - 1.0

    @property
    def remainder(self) -> float:
        return self.gauge_mpa / self.expected_mpa - 1.0

    @property
    def explained_by_friction(self) -> bool:
        """The remainder is low, and by no more than fixed rollers can do."""
        return -self.friction_share <= self.remainder < 0.0


def hooke_stress_mpa(strain_along: float, modulus_mpa: float) -> float:
    """Uniaxial stress of a bar: E e."""
    return modulus_mpa * strain_along


def hooke_plane_stress_mpa(
    strain_along: float, strain_across: float, modulus_mpa: float, poisson_ratio: float
) -> float:
    """Two gauges at right angles on a wide plate: E (e_x + nu e_y)/(1 - nu^2)."""
    return modulus_mpa * (strain_along + poisson_ratio * strain_across) / (1.0 - poisson_ratio**2)


def compare(
    gauge_mpa: float,
    force_n: float,
    section: Section,
    spans: Spans,
    *,
    from_mid_mm: float,
    gauge_length_mm: float,
    chamfer_mm: float = 0.0,
    rollers_free: bool = True,
) -> Comparison:
    """Place, gradient along the gauge, rollers' own stress and chamfer, for a gauge on the tension face."""
    place = float(moment_share(from_mid_mm, spans))
    mean = gauge_mean_share(gauge_length_mm, from_mid_mm, spans)
    reasons = [Reason("place along the bar", place)] if place != 1.0 else []
    if place > 0.0 and abs(mean - place) > ROUNDING:
        reasons.append(Reason("moment gradient along the gauge", mean / place))
    if isinstance(section, Rectangle):
        roller = gauge_roller_share(gauge_length_mm, from_mid_mm, section, spans)
        if mean > 0.0 and abs(roller) > STRIP_ERROR:
            reasons.append(Reason("load rollers' own stress", 1.0 + roller / mean))
        if chamfer_mm > 0.0:
            reasons.append(Reason("chamfered edges", chamfer_factor(section, chamfer_mm)))
    friction = 0.0 if rollers_free else friction_share_max(section, spans)
    return Comparison(gauge_mpa, beam_stress_mpa(force_n, section, spans), tuple(reasons), friction)
