"""Remarks from what the method asks of bar, fixture, frame and rate. Only what its card states is judged."""

from __future__ import annotations

from collections.abc import Iterator

from daq.cards.derived import nominal_section, section_of
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.results.result import Course, Loads
from daq.results.rules import Remark
from daq.results.setup import Setup

SPAN_SLACK = 1e-6


def method_remarks(setup: Setup, loads: Loads, course: Course) -> Iterator[Remark]:
    """In a fixed order: sizes, slenderness, fixture, force, strain."""
    method = setup.method
    if method is None:
        return
    if setup.specimen is not None:
        yield from _sizes(setup.specimen, method)
    yield from _slenderness(setup, method)
    yield from _fixture(setup, method)
    yield from _force(setup, method, loads)
    limit, strain = method.validity.strain_percent_max, course.strain_at_break
    if limit is not None and strain is not None and 100.0 * strain > limit:
        text = f"{100 * strain:.2f} % at the break; the method applies up to {limit:g} %"
        yield Remark("strain above the method's", text)


def _sizes(specimen: Specimen, method: MethodCard) -> Iterator[Remark]:
    measured = {"thickness": specimen.thickness_mm}
    if method.section == "rectangle":
        measured["width"] = specimen.width_mm
    few = [f"{len(found)} of {name}" for name, found in measured.items() if len(found) < method.readings]
    if few:
        yield Remark("few readings", f"{' and '.join(few)}; the method wants {method.readings} of each")
    if not all(measured.values()):
        return
    wanted, found_ = nominal_section(method), section_of(specimen, method)
    tolerance = method.dimension_tolerance_percent / 100.0
    for name in measured:
        nominal_mm, own_mm = getattr(wanted, f"{name}_mm"), getattr(found_, f"{name}_mm")
        if abs(own_mm / nominal_mm - 1.0) > tolerance:
            text = f"{name} {own_mm:.4g} mm; nominal {nominal_mm:g} mm within {100 * tolerance:g} %"
            yield Remark("size out of tolerance", text)


def _slenderness(setup: Setup, method: MethodCard) -> Iterator[Remark]:
    band = method.validity.span_per_thickness
    if band is None or setup.section is None or setup.spans is None:
        return
    ratio = setup.spans.support_mm / setup.section.depth_mm
    if not band[0] <= ratio <= band[1]:
        yield Remark(
            "slenderness", f"span over thickness {ratio:.3g}; the method allows {band[0]:g} to {band[1]:g}"
        )


def _fixture(setup: Setup, method: MethodCard) -> Iterator[Remark]:
    fixture, needs = setup.fixture, method.needs
    if fixture is None:
        return
    off_mm = abs(fixture.support_span_mm - method.support_span_mm)
    allowed = [needs.span_tolerance_mm]
    if needs.span_tolerance_percent is not None:
        allowed.append(method.support_span_mm * needs.span_tolerance_percent / 100.0)
    given = [limit for limit in allowed if limit is not None]
    if given and off_mm > max(given) + SPAN_SLACK:
        text = f"support span {fixture.support_span_mm:g} mm; the method wants {method.support_span_mm:g} mm"
        yield Remark("span off the method's", f"{text} within {max(given):g} mm")
    band = needs.roller_diameter_mm
    if band is not None and not band[0] <= fixture.roller_diameter_mm <= band[1]:
        text = f"rollers of {fixture.roller_diameter_mm:g} mm; the method wants {band[0]:g} to {band[1]:g} mm"
        yield Remark("rollers off the method's", text)
    if needs.rollers_free and fixture.rollers != "free":
        yield Remark("rollers not free", "the rollers are fixed; the method wants them free to roll")


def _force(setup: Setup, method: MethodCard, loads: Loads) -> Iterator[Remark]:
    frame, validity = setup.frame, method.validity
    if frame is None:
        return
    error, limit = frame.cell.uncertainty_percent, validity.force_error_percent
    if limit is not None and error > limit:
        yield Remark("force reading", f"uncertain by {error:g} %; the method allows {limit:g} %")
    band = validity.force_range_percent
    if band is not None and loads.used_n is not None:
        share = 100.0 * loads.used_n / frame.cell.capacity_n
        if not band[0] <= share <= band[1]:
            text = f"broken at {share:.3g} % of the cell's capacity; the method wants {band[0]:g} to {band[1]:g} %"
            yield Remark("load outside the method's range", text)
