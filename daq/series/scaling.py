"""Effective sizes of a series, and what its strength would be in other loadings: 3-point, quarter-point, tension.

The modulus is uncertain and the scaling goes with 1/m, so each strength comes with the range that the bounds of m give.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from daq.mechanics.sections import Circle, Rectangle, Spans
from daq.series.bars import Bar
from daq.series.size import effective_surface_mm2, effective_volume_mm3, scaled_strength_mpa

if TYPE_CHECKING:
    from daq.series.analysis import Estimate


@dataclass(frozen=True, slots=True)
class Scaled:
    """Characteristic strength in another loading of the same bar; low and high from the bounds of m at `level`."""

    loading: str
    flaws: str
    strength_mpa: float
    low_mpa: float | None
    high_mpa: float | None


@dataclass(frozen=True, slots=True)
class Sizes:
    """Of a bar of mean size. unit_volume_mpa: characteristic strength of 1 mm3 in uniform tension."""

    modulus: float
    volume_mm3: float
    surface_mm2: float
    unit_volume_mpa: float
    unit_surface_mpa: float
    scaled: tuple[Scaled, ...]
    level: float


def sizes_of(bars: Sequence[Bar], estimate: Estimate, level: float) -> Sizes | None:
    """None for tubes and where sizes or spans are not known."""
    section, spans = mean_section(bars), next((bar.spans for bar in bars if bar.spans is not None), None)
    if section is None or spans is None:
        return None
    fit, bounds = estimate.fit, estimate.bounds.get(level)
    m, scale = fit.modulus, fit.scale_mpa
    volume, surface = effective_volume_mm3(section, spans, m), effective_surface_mm2(section, spans, m)
    edges = (None, None) if bounds is None else (bounds.modulus.low, bounds.modulus.high)
    return Sizes(
        modulus=m,
        volume_mm3=volume,
        surface_mm2=surface,
        unit_volume_mpa=scaled_strength_mpa(scale, volume, 1.0, m),
        unit_surface_mpa=scaled_strength_mpa(scale, surface, 1.0, m),
        scaled=tuple(
            _scaled(name, to, flaws, scale, section, spans, m, edges)
            for name, to in loadings(spans).items()
            for flaws in ("volume", "surface")
            if not (to is None and flaws == "surface")
        ),
        level=level,
    )


def loadings(spans: Spans) -> dict[str, Spans | None]:
    """The other loadings on the same support span; None: uniform tension of the span."""
    found: dict[str, Spans | None] = {}
    if spans.load_mm > 0:
        found["three-point"] = Spans(spans.support_mm)
    if abs(spans.load_mm / spans.support_mm - 0.5) > 1e-6:
        found["quarter-point"] = Spans(spans.support_mm, spans.support_mm / 2.0)
    found["tension of the span"] = None
    return found


def _scaled(
    name: str, to: Spans | None, flaws: str, scale: float, section: Rectangle | Circle, spans: Spans,
    m: float, edges: tuple[float | None, float | None],
) -> Scaled:  # fmt: skip
    def at(modulus: float) -> float:
        here, there = (
            _size(flaws, section, spans, modulus),
            _size(flaws, section, to, modulus, spans.support_mm),
        )
        return scaled_strength_mpa(scale, here, there, modulus)

    ends = [at(edge) for edge in edges if edge is not None]
    whole = len(ends) == 2
    return Scaled(name, flaws, at(m), min(ends) if whole else None, max(ends) if whole else None)


def _size(
    flaws: str, section: Rectangle | Circle, spans: Spans | None, modulus: float, length_mm: float = 0.0
) -> float:
    if spans is None:
        return section.area_mm2 * length_mm
    if flaws == "volume":
        return effective_volume_mm3(section, spans, modulus)
    return effective_surface_mm2(section, spans, modulus)


def mean_section(bars: Sequence[Bar]) -> Rectangle | Circle | None:
    """Bar of mean width and thickness; None where not all are of one kind."""
    rectangles = [bar.section for bar in bars if isinstance(bar.section, Rectangle)]
    if rectangles and len(rectangles) == len(bars):
        n = len(rectangles)
        return Rectangle(
            sum(one.width_mm for one in rectangles) / n, sum(one.thickness_mm for one in rectangles) / n
        )
    circles = [bar.section for bar in bars if isinstance(bar.section, Circle)]
    if circles and len(circles) == len(bars):
        return Circle(sum(one.diameter_mm for one in circles) / len(circles))
    return None
