"""What a standard prints beside the nominal stress: each a field of its own, none ever the strength itself.

Breaking strength of tiles, own weight of glass plates, rounded factors, corrections for large deflection - and only
those that the method card names.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

from daq.mechanics.large import LargeDeflection, stress_factor
from daq.mechanics.sections import Rectangle
from daq.mechanics.stress import breaking_strength_n, glass_plate_stress_mpa
from daq.results.setup import Setup

FORMS: Mapping[tuple[str, str], LargeDeflection] = MappingProxyType({
    ("ASTM D790", "3-point"): LargeDeflection.D790_3_POINT,
    ("ISO 14125", "3-point"): LargeDeflection.ISO_14125_3_POINT,
    ("ISO 14125", "4-point-third"): LargeDeflection.ISO_14125_4_POINT_THIRD,
    ("ASTM D6272", "4-point-quarter"): LargeDeflection.D6272_4_POINT_QUARTER,
})  # fmt: skip


@dataclass(frozen=True, slots=True)
class Printed:
    """None: not asked for by the method, or not known. plate_mpa: own weight and edge factor in (EN 1288-3 form)."""

    breaking_strength_n: float | None = None
    plate_mpa: float | None = None
    rounded_factor_mpa: float | None = None
    large_deflection_mpa: float | None = None


NOTHING_PRINTED = Printed()


def printed_of(setup: Setup, load_n: float | None, mid_mm: float | None) -> Printed:
    """mid_mm: deflection at mid-span at the break, toe taken off; None: not measured there."""
    method, section, spans = setup.method, setup.section, setup.spans
    if method is None or spans is None or load_n is None or not isinstance(section, Rectangle):
        return NOTHING_PRINTED
    asked = method.strength
    plate = large = None
    if asked.density_kg_m3 is not None:
        plate = float(
            glass_plate_stress_mpa(
                load_n, section, spans, density_kg_m3=asked.density_kg_m3, edge_factor=asked.edge_factor
            )
        )
    form = FORMS.get((asked.large_deflection, method.geometry))
    if form is not None and mid_mm is not None:
        factor = stress_factor(form, mid_mm, spans.support_mm, section.thickness_mm)
        large = load_n * setup.stress_per_newton_mpa * factor
    factor_mpa_n = asked.printed_factor_mpa_n
    return Printed(
        breaking_strength_n=breaking_strength_n(load_n, spans.support_mm, section.width_mm)
        if asked.breaking_strength
        else None,
        plate_mpa=plate,
        rounded_factor_mpa=None if factor_mpa_n is None else load_n * factor_mpa_n,
        large_deflection_mpa=large,
    )
