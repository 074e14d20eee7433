"""Cross rules of a method card's windows: low end first, bands of the mode's own unit, sizes that exist."""

from __future__ import annotations

from collections.abc import Iterator

from daq.cards.describe import Path
from daq.cards.faults import Fault
from daq.cards.method import MethodCard

BANDS = {"crosshead": "speed_band_mm_min", "force": "band_n_s", "stress": "band_mpa_s"}
RATES = {"crosshead": "speed_mm_min", "force": "rate_n_s", "stress": "rate_mpa_s"}


def window_faults(card: MethodCard) -> Iterator[Fault]:
    """Every fault of the windows and of the rules that belong to a kind of bar."""
    for path, window in _windows(card).items():
        if window is not None and not window[0] < window[1]:
            allowed = f"more than the lower end of {window[0]:g}"
            yield Fault((*path, 1), allowed, "write [lowest, highest]", f"{window[1]:g}")
    yield from _band_faults(card)
    yield from _region_faults(card)
    yield from _dimension_faults(card)
    rounding = card.rounding
    if rounding.stress_step_mpa is not None and rounding.stress_digits is not None:
        yield Fault(("rounding", "stress_digits"), "left out where stress_step_mpa is given", "keep one")


def _windows(card: MethodCard) -> dict[Path, tuple[float, float] | None]:
    validity, needs = card.validity, card.needs
    return {
        ("validity", "strain_rate_per_s"): validity.strain_rate_per_s,
        ("validity", "force_range_percent"): validity.force_range_percent,
        ("validity", "span_per_thickness"): validity.span_per_thickness,
        ("rate", "speed_band_mm_min"): card.rate.speed_band_mm_min,
        ("rate", "band_n_s"): card.rate.band_n_s,
        ("rate", "band_mpa_s"): card.rate.band_mpa_s,
        ("needs", "roller_diameter_mm"): _or_equal(needs.roller_diameter_mm),
        ("needs", "load_roller_diameter_mm"): _or_equal(needs.load_roller_diameter_mm),
    }


def _or_equal(window: tuple[float, float] | None) -> tuple[float, float] | None:
    """One diameter alone may be allowed; only a window that runs backwards is a fault."""
    return None if window is None or window[0] == window[1] else window


def _band_faults(card: MethodCard) -> Iterator[Fault]:
    rate = card.rate
    for mode, key in BANDS.items():
        band = getattr(rate, key)
        if band is None:
            continue
        if mode != rate.mode:
            yield Fault(("rate", key), f"left out in mode '{rate.mode}'", f"use {BANDS[rate.mode]}")
            continue
        value = getattr(rate, RATES[mode])
        if value is not None and not band[0] <= value <= band[1]:
            allowed = f"from {band[0]:g} to {band[1]:g}, the band {key} of this card"
            yield Fault(("rate", RATES[mode]), allowed, "correct one of the two")


def _region_faults(card: MethodCard) -> Iterator[Fault]:
    place = card.validity.break_place
    if place.region == "load span" and card.geometry == "3-point":
        allowed = "'anywhere', 'middle third' or 'roller width' for geometry '3-point'"
        yield Fault(("validity", "break_place", "region"), allowed, "3-point has no load span")
    if place.near_stress == "at the break" and (
        card.section != "rectangle" or place.region != "load span" or card.geometry == "3-point"
    ):
        allowed = "'nominal' unless a rectangle breaks outside its load span"
        yield Fault(("validity", "break_place", "near_stress"), allowed, "correct region or section")


def _dimension_faults(card: MethodCard) -> Iterator[Fault]:
    unknown = {
        "rectangle": ("diameter", "inner diameter"),
        "circle": ("width", "thickness", "inner diameter", "chamfer"),
        "tube": ("width", "thickness", "chamfer"),
    }[card.section]
    for number, dimension in enumerate(card.measuring.dimensions):
        if dimension in unknown:
            allowed = f"a size that a bar of section '{card.section}' has"
            yield Fault(("measuring", "dimensions", number), allowed, "remove it, or correct section")
    if card.strength.breaking_strength and card.section != "rectangle":
        yield Fault(("strength", "breaking_strength"), "false for a bar without a width", "remove it")
    if card.strength.density_kg_m3 is not None and card.section != "rectangle":
        yield Fault(("strength", "density_kg_m3"), "left out: the form is one of plates", "remove it")
