"""What one strength is worth: GUM, first order, per bar; k = 2.

Every contributor is listed, every one that is not known is listed too, and one-sided terms stay apart: a
friction that can only lower the true stress is no +-. Scatter between bars is not an uncertainty of
measurement and is not in here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from daq.mechanics.friction import FIXED_ROLLER_FRICTION, friction_share_max
from daq.mechanics.sections import Circle, Rectangle, Section, Tube
from daq.results.setup import Setup

COVERAGE = 2.0


@dataclass(frozen=True, slots=True)
class Contributor:
    """One input: its standard uncertainty as a share of the strength (sensitivity included)."""

    name: str
    share: float


@dataclass(frozen=True, slots=True)
class Uncertainty:
    """share: combined standard uncertainty over the strength. one_sided: true stress may be lower by up to
    this.
    """

    contributors: tuple[Contributor, ...]
    not_included: tuple[str, ...]
    one_sided: tuple[Contributor, ...]

    @property
    def share(self) -> float:
        return math.sqrt(math.fsum(part.share**2 for part in self.contributors))


def uncertainty_of(
    setup: Setup, *, load_n: float, u_peak_n: float | None, u_tare_n: float | None, lag_known: bool
) -> Uncertainty | None:
    """None where sizes or spans are missing, or there is no load."""
    if setup.section is None or setup.spans is None or not load_n > 0:
        return None
    parts: list[Contributor] = []
    left_out: list[str] = []
    _add_force(setup, load_n, u_peak_n, u_tare_n, parts, left_out)
    _add_spans(setup, parts, left_out)
    parts.extend(_sizes(setup, setup.section))
    if not lag_known:
        left_out.append("lag of the force chain")
    if setup.chamfer_mm > 0:
        left_out.append("chamfer (nominal stress is reported; see the chamfer factor)")
    if setup.spans.load_mm == 0:
        left_out.append("place of the break (three-point)")
    return Uncertainty(tuple(parts), tuple(left_out), _one_sided(setup))


def _add_force(
    setup: Setup,
    load_n: float,
    u_peak_n: float | None,
    u_tare_n: float | None,
    parts: list[Contributor],
    left_out: list[str],
) -> None:
    if setup.frame is None:
        left_out.append("force reading")
    else:
        parts.append(Contributor("force reading", setup.frame.cell.uncertainty_percent / 100.0 / COVERAGE))
    for name, u_n in (("peak between samples", u_peak_n), ("tare", u_tare_n)):
        if u_n is None or not math.isfinite(u_n):
            left_out.append(name)
        else:
            parts.append(Contributor(name, u_n / load_n))


def _add_spans(setup: Setup, parts: list[Contributor], left_out: list[str]) -> None:
    """sigma goes with (L - Li): both spans' rectangular half-widths over it. Three-point has one span."""
    assert setup.spans is not None
    if setup.fixture is None:
        left_out.append("spans")
        return
    arm_mm = setup.spans.support_mm - setup.spans.load_mm
    parts.append(Contributor("support span", setup.fixture.support_span_u_mm / math.sqrt(3.0) / arm_mm))
    if setup.spans.load_mm > 0:
        parts.append(Contributor("load span", setup.fixture.load_span_u_mm / math.sqrt(3.0) / arm_mm))


def _sizes(setup: Setup, section: Section) -> tuple[Contributor, ...]:
    """Sensitivities of W: width 1, thickness 2; rod 3; tube from its own second moment."""
    assert setup.method is not None and setup.specimen is not None
    gauge_mm = setup.method.dimension_u_mm / math.sqrt(3.0)
    u_depth_mm = _u_mean_mm(setup.specimen.thickness_mm, gauge_mm)
    match section:
        case Rectangle(width_mm, thickness_mm):
            u_width_mm = _u_mean_mm(setup.specimen.width_mm, gauge_mm)
            return (
                Contributor("width", u_width_mm / width_mm),
                Contributor("thickness", 2.0 * u_depth_mm / thickness_mm),
            )
        case Circle(diameter_mm):
            return (Contributor("diameter", 3.0 * u_depth_mm / diameter_mm),)
        case Tube(outer_mm, inner_mm):
            left = outer_mm**4 - inner_mm**4
            return (
                Contributor("diameter", (4.0 * outer_mm**4 / left - 1.0) * u_depth_mm / outer_mm),
                Contributor("inner diameter", 4.0 * inner_mm**3 * gauge_mm / left),
            )


def _u_mean_mm(readings_mm: tuple[float, ...], gauge_mm: float) -> float:
    """Scatter of the mean (where there are two readings or more) and the gauge's own."""
    scatter_mm = 0.0
    if len(readings_mm) > 1:
        scatter_mm = float(np.std(np.array(readings_mm), ddof=1)) / math.sqrt(len(readings_mm))
    return math.hypot(scatter_mm, gauge_mm)


def _one_sided(setup: Setup) -> tuple[Contributor, ...]:
    assert setup.section is not None and setup.spans is not None
    if setup.fixture is None or setup.fixture.rollers == "free":
        return ()
    share = friction_share_max(setup.section, setup.spans, FIXED_ROLLER_FRICTION)
    return (Contributor("friction of fixed rollers", share),)
