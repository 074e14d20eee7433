"""What one bar is expected to do: loads, stiffness, rate, time. Numbers from cards; judges nothing.

Weibull: F = 1 - exp(-(s/s0)^m), the mean is s0 G(1 + 1/m), so the strength of a card is the mean strength.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

from daq.cards.frame import Compliance, Fixture
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.mechanics.deflection import load_point_stiffness_n_mm
from daq.mechanics.sections import Circle, Rectangle, Section, Spans, Tube
from daq.mechanics.stress import force_for_stress_n

SECONDS_PER_MINUTE = 60.0


@dataclass(frozen=True, slots=True)
class Expected:
    """Plan numbers of one bar in one fixture on one frame. stiffness_machine_n_mm None: not known."""

    load_p01_n: float
    load_p50_n: float
    load_p999_n: float
    load_per_stress_n_mpa: float
    stiffness_bar_n_mm: float
    stiffness_machine_n_mm: float | None
    speed_mm_min: float
    rate_n_s: float

    @property
    def stiffness_n_mm(self) -> float:
        """Force over crosshead travel, bar and machine in series."""
        return in_series(self.stiffness_bar_n_mm, self.stiffness_machine_n_mm)

    @property
    def deflection_mm(self) -> float:
        """Crosshead travel from contact to the median break load, without a toe."""
        return self.load_p50_n / self.stiffness_n_mm

    @property
    def time_to_break_s(self) -> float:
        return self.load_p50_n / self.rate_n_s


def in_series(bar_n_mm: float, machine_n_mm: float | None) -> float:
    return bar_n_mm if machine_n_mm is None else bar_n_mm * machine_n_mm / (bar_n_mm + machine_n_mm)


def mean(values: Sequence[float]) -> float:
    return sum(values) / len(values)


def section_of(method: MethodCard, specimen: Specimen) -> Section:
    """Measured sizes where there are any, else nominal ones."""
    depth = mean(specimen.thickness_mm)
    if method.section == "rectangle":
        width = mean(specimen.width_mm) if specimen.width_mm else method.width_mm
        assert width is not None, "checked by setup.open_problems"
        return Rectangle(width, depth)
    if method.section == "tube":
        return Tube(depth, specimen.inner_diameter_mm or method.inner_diameter_mm)
    return Circle(depth)


def machine_stiffness_n_mm(compliance: Compliance, force_n: float) -> float | None:
    """Local stiffness of everything but the bar at that force; None where the table does not say."""
    points = compliance.points
    pairs = itertools.pairwise(points)
    below, above = next(((p, q) for p, q in pairs if force_n <= q.force_n), (points[-2], points[-1]))
    travel_mm = (above.deflection_um - below.deflection_um) * 1e-3
    return (above.force_n - below.force_n) / travel_mm if travel_mm > 0 else None


def weibull_quantile(mean_strength: float, modulus: float, probability: float) -> float:
    scale = mean_strength / math.gamma(1.0 + 1.0 / modulus)
    return scale * math.pow(-math.log1p(-probability), 1.0 / modulus)


def expect(
    method: MethodCard,
    specimen: Specimen,
    fixture: Fixture,
    compliance: Compliance | None,
    fallback_stiffness_n_mm: float | None,
) -> Expected:
    """The plan. fallback: stiffness of the frame where no compliance table belongs to this fixture."""
    section, spans = section_of(method, specimen), Spans(fixture.support_span_mm, fixture.load_span_mm)
    per_stress = force_for_stress_n(1.0, section, spans)
    strength, weibull = method.expected.strength_mpa, method.expected.weibull_modulus
    p01, p50, p999 = (per_stress * weibull_quantile(strength, weibull, p) for p in (0.01, 0.5, 0.999))
    bar = load_point_stiffness_n_mm(method.expected.modulus_gpa * 1e3, section, spans)
    measured = machine_stiffness_n_mm(compliance, p50) if compliance is not None else None
    machine = fallback_stiffness_n_mm if measured is None else measured
    speed, rate_n_s = _pace(method, in_series(bar, machine), per_stress)
    return Expected(p01, p50, p999, per_stress, bar, machine, speed, rate_n_s)


def _pace(method: MethodCard, stiffness_n_mm: float, per_stress: float) -> tuple[float, float]:
    """Crosshead speed in mm/min and force rate in N/s, each from the other where the card gives only one."""
    rate = method.rate
    wanted_n_s = rate.rate_n_s if rate.mode == "force" else None
    if rate.mode == "stress" and rate.rate_mpa_s is not None:
        wanted_n_s = rate.rate_mpa_s * per_stress
    if wanted_n_s is not None:
        speed = rate.speed_mm_min or wanted_n_s / stiffness_n_mm * SECONDS_PER_MINUTE
        return speed, wanted_n_s
    assert rate.speed_mm_min is not None, "checked by setup.open_problems"
    return rate.speed_mm_min, rate.speed_mm_min / SECONDS_PER_MINUTE * stiffness_n_mm
