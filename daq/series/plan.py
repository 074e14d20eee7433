"""The plan: what a method, a material and a frame will do before a bar is cut. Numbers only; gates judge them.

Two-parameter Weibull on the mean strength of the card. Beam and frame are two springs in series; the toe
is not planned. Corrections are separate numbers beside the nominal beam stress.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from daq.cards.derived import compliance_for, fixture_by_name, geometry_of, nominal_section, spans_of
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.mechanics import contact, edges, friction
from daq.mechanics.deflection import load_point_stiffness_n_mm, shear_share_load_point
from daq.mechanics.rates import force_rate_for_stress_rate_n_s, force_rate_n_s, strain_rate_per_s
from daq.mechanics.sections import Circle, Rectangle, Section, Spans, Tube
from daq.mechanics.stress import breaking_strength_n, dead_weight_stress_mpa, stress_per_newton_mpa
from daq.results.expected import planned_quantile_mpa

QUANTILES = (("P0.1", 0.001), ("P1", 0.01), ("P50", 0.5), ("P99", 0.99), ("P99.9", 0.999))
FILTER_SHARE = 1.0 / (2.0 * math.pi)  # first-order filter: time constant = 0.159/bandwidth
MILLIJOULE_PER_N_MM = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Bench:
    """What the frame brings to the plan; None: not known. stiffness: everything but the bar; inf: rigid."""

    name: str = ""
    fixture: str = ""
    stiffness_n_mm: float = math.inf
    stiffness_source: str = "a rigid frame is assumed"
    stiffness_measured: bool = False
    capacity_n: float | None = None
    verified_n: tuple[float, float] | None = None
    rating_n: float | None = None
    rate_hz: float | None = None
    time_constant_s: float | None = None
    lag_source: str = ""
    noise_n: float | None = None
    speed_mm_min: tuple[float, float] | None = None
    rollers_fixed: bool = False


@dataclass(frozen=True, slots=True)
class Break:
    """One bar of the plan: loads, deflections at the loading roller, time from contact, energy stored."""

    name: str
    probability: float | None
    load_n: float
    stress_mpa: float
    bar_um: float
    travel_um: float
    time_s: float
    energy_mj: float


@dataclass(frozen=True, slots=True)
class Corrections:
    """Separate numbers beside the nominal stress; 1 or 0 where there is nothing to correct.

    chamfer, roller: factors on the nominal stress (roller: its greatest value, local). shear_share: of the bar's
    bending deflection. friction_share: fixed rollers, the true stress may be lower by so much. own_weight_mpa: added.
    """

    chamfer: float
    roller: float
    shear_share: float
    friction_share: float
    own_weight_mpa: float


@dataclass(frozen=True, slots=True)
class Plan:
    """Everything the gates and the table need. rigid_stress_rate: the same speed on a rigid frame."""

    method: MethodCard
    bench: Bench
    section: Section
    spans: Spans
    stress_per_n_mpa: float
    scale_mpa: float
    bar_n_mm: float
    force_rate_n_s: float
    speed_mm_min: float
    stress_rate_mpa_s: float
    rigid_stress_rate_mpa_s: float
    strain_rate_per_s: float
    breaks: tuple[Break, ...]
    corrections: Corrections

    @property
    def mean(self) -> Break:
        """The bar of mean strength: the one that `time to break` speaks of."""
        return self.breaks[-1]

    @property
    def span_per_thickness(self) -> float:
        return self.spans.support_mm / self.section.depth_mm

    @property
    def machine_share(self) -> float:
        """Part of the crosshead travel that is not the bar's; 0 on a rigid frame."""
        return self.bar_n_mm / (self.bar_n_mm + self.bench.stiffness_n_mm)

    def at(self, name: str) -> Break:
        """The row of that name, such as P1."""
        return next(row for row in self.breaks if row.name == name)

    def share_below(self, load_n: float) -> float:
        """Share of the bars that break below this load."""
        stress_mpa = load_n * self.stress_per_n_mpa
        return -math.expm1(-((stress_mpa / self.scale_mpa) ** self.method.expected.weibull_modulus))

    def share_before(self, time_s: float) -> float:
        """Share of the bars that break before this time from contact."""
        return self.share_below(time_s * self.force_rate_n_s)

    @property
    def breaking_strength_n(self) -> float | None:
        """Tiles: F L/b at the mean; None for other bars."""
        if not self.method.strength.breaking_strength or not isinstance(self.section, Rectangle):
            return None
        return breaking_strength_n(self.mean.load_n, self.spans.support_mm, self.section.width_mm)


def make_plan(method: MethodCard, bench: Bench | None = None, spans: Spans | None = None) -> Plan:
    """The plan of nominal bars. spans: as measured on the fixture; left out, the method's."""
    bench = Bench() if bench is None else bench
    asked = geometry_of(method)
    spans = Spans(asked.support_mm, asked.load_mm) if spans is None else spans
    section = section_of(method)
    per_n = stress_per_newton_mpa(section, spans)
    bar_n_mm = load_point_stiffness_n_mm(1e3 * method.expected.modulus_gpa, section, spans)
    series_n_mm = in_series(bar_n_mm, bench.stiffness_n_mm)
    rate_n_s, speed = pace(method, section, spans, bar_n_mm, bench.stiffness_n_mm)
    strain_rate = strain_rate_per_s(speed, section, spans)
    springs = (per_n, bar_n_mm, series_n_mm, rate_n_s)
    rows = [_break(name, p, planned_quantile_mpa(method, p), *springs) for name, p in QUANTILES]
    rows.append(_break("mean", None, method.expected.strength_mpa, *springs))
    return Plan(
        method=method,
        bench=bench,
        section=section,
        spans=spans,
        stress_per_n_mpa=per_n,
        scale_mpa=method.expected.strength_mpa / math.gamma(1.0 + 1.0 / method.expected.weibull_modulus),
        bar_n_mm=bar_n_mm,
        force_rate_n_s=rate_n_s,
        speed_mm_min=speed,
        stress_rate_mpa_s=rate_n_s * per_n,
        rigid_stress_rate_mpa_s=1e3 * method.expected.modulus_gpa * strain_rate,
        strain_rate_per_s=strain_rate,
        breaks=tuple(rows),
        corrections=_corrections(method, section, spans, bench),
    )


def in_series(bar_n_mm: float, frame_n_mm: float) -> float:
    """Two springs in series; an infinite frame leaves the bar."""
    return 1.0 / (1.0 / bar_n_mm + 1.0 / frame_n_mm)


def pace(
    method: MethodCard, section: Section, spans: Spans, bar_n_mm: float, frame_n_mm: float
) -> tuple[float, float]:
    """(force rate in N/s, crosshead speed in mm/min), each from the other by the springs in series."""
    rate = method.rate
    if rate.mode == "crosshead":
        assert rate.speed_mm_min is not None
        if math.isinf(frame_n_mm):
            return rate.speed_mm_min / 60.0 * bar_n_mm, rate.speed_mm_min
        return force_rate_n_s(rate.speed_mm_min, bar_n_mm, frame_n_mm), rate.speed_mm_min
    if rate.mode == "force":
        assert rate.rate_n_s is not None
        rate_n_s = rate.rate_n_s
    else:
        assert rate.rate_mpa_s is not None
        rate_n_s = force_rate_for_stress_rate_n_s(rate.rate_mpa_s, section, spans)
    return rate_n_s, 60.0 * rate_n_s / in_series(bar_n_mm, frame_n_mm)


def section_of(method: MethodCard) -> Section:
    """The nominal cross-section in the terms of the mechanics."""
    size = nominal_section(method)
    if size.section == "rectangle":
        return Rectangle(size.width_mm, size.thickness_mm)
    if size.section == "tube":
        return Tube(size.thickness_mm, size.inner_diameter_mm)
    return Circle(size.thickness_mm)


def bench_of(frame: FrameCard, fixture_name: str) -> tuple[Bench, Spans]:
    """What a frame card says, with this fixture fitted, and the spans as measured."""
    fixture = fixture_by_name(frame, fixture_name)
    measured = spans_of(fixture)
    table = compliance_for(frame, fixture_name)
    stiffness, source = math.inf, "a rigid frame is assumed: no compliance table for this fixture"
    if table is not None and table.points[-1].deflection_um > table.points[0].deflection_um:
        first, last = table.points[0], table.points[-1]
        stiffness = 1e3 * (last.force_n - first.force_n) / (last.deflection_um - first.deflection_um)
        source = f"compliance table, {first.force_n:g} to {last.force_n:g} N"
    elif frame.motion is not None:
        stiffness = frame.motion.blocked_stiffness_n_mm
        source = "blocked stiffness of the frame card; no compliance table for this fixture"
    force = next(channel for channel in frame.channels if channel.role == "force")
    lag_s, lag_source = lag_of(frame.cell.time_constant_s, frame.cell.bandwidth_hz)
    bench = Bench(
        name=frame.name,
        fixture=fixture_name,
        stiffness_n_mm=stiffness,
        stiffness_source=source,
        stiffness_measured=table is not None,
        capacity_n=frame.cell.capacity_n,
        verified_n=(frame.cell.verified_min_n, frame.cell.verified_max_n),
        rating_n=fixture.rating_n,
        rate_hz=next(link.rate_hz for link in frame.links if link.name == force.link),
        time_constant_s=lag_s,
        lag_source=lag_source,
        noise_n=frame.cell.noise_quiet_n,
        speed_mm_min=None
        if frame.motion is None
        else (frame.motion.speed_mm_min_min, frame.motion.speed_mm_min_max),
        rollers_fixed=fixture.rollers == "fixed",
    )
    return bench, Spans(measured.support_mm, measured.load_mm)


def lag_of(time_constant_s: float | None, bandwidth_hz: float | None) -> tuple[float | None, str]:
    """The declared lag, else that of a first-order filter of the declared bandwidth; None: not known."""
    if time_constant_s is not None:
        return time_constant_s, "declared"
    if bandwidth_hz is not None:
        return FILTER_SHARE / bandwidth_hz, f"first-order filter of {bandwidth_hz:g} Hz assumed"
    return None, "not known"


def _break(
    name: str,
    probability: float | None,
    stress_mpa: float,
    per_n_mpa: float,
    bar_n_mm: float,
    series_n_mm: float,
    rate_n_s: float,
) -> Break:
    load_n = stress_mpa / per_n_mpa
    travel_mm = load_n / series_n_mm
    return Break(
        name,
        probability,
        load_n,
        stress_mpa,
        1e3 * load_n / bar_n_mm,
        1e3 * travel_mm,
        load_n / rate_n_s,
        0.5 * load_n * travel_mm * MILLIJOULE_PER_N_MM,
    )


def _corrections(method: MethodCard, section: Section, spans: Spans, bench: Bench) -> Corrections:
    chamfer = roller = 1.0
    own_mpa = 0.0
    if isinstance(section, Rectangle):
        chamfer = edges.chamfer_factor(section, method.chamfer_mm)
        if spans.load_mm > 0:
            roller = contact.four_point_peak_ratio(section.thickness_mm, spans)
        else:
            roller = contact.three_point_ratio(section.thickness_mm, spans.support_mm)
        density = method.strength.density_kg_m3
        if density is not None:
            own_mpa = dead_weight_stress_mpa(section.thickness_mm, spans.support_mm, density)
    nu = method.expected.poisson_ratio
    shear = shear_share_load_point(section, spans, nu, section.shear_coefficient(nu))
    fixed = friction.friction_share_max(section, spans) if bench.rollers_fixed else 0.0
    return Corrections(chamfer, roller, shear, fixed, own_mpa)
