"""Cross rules of a method card: spans against geometry, section, rate, strength against modulus, clauses."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from pydantic import ValidationError

from daq.cards.describe import keys_at
from daq.cards.faults import Fault
from daq.cards.method import Clause, Expected, MethodCard, Rate
from daq.cards.rules_validity import window_faults

# Spans typed with three decimals still count as half or third.
SHARE_TOLERANCE = 1e-3
# Common practice, no source: no brittle solid reaches a twentieth of its modulus in bending.
STRENGTH_SHARE_MAX = 1.0 / 20.0
PSI_PER_MPA = 145.0377
# A shorter beam is a block: the flexure formula has nothing to say about it (common practice, no source).
SPAN_PER_THICKNESS_MIN = 2.0

STAND_IN_RATE: Mapping[str, object] = {"mode": "crosshead", "speed_mm_min": 1.0}
STAND_IN_EXPECTED: Mapping[str, object] = {"strength_mpa": 1.0, "modulus_gpa": 1.0}


@dataclass(frozen=True, slots=True)
class MethodParts:
    """The readable parts of a method card; body has stand-ins where rate or expected could not be read."""

    body: MethodCard | None
    rate: Rate | None
    expected: Expected | None


def method_parts(tree: Mapping[str, object]) -> MethodParts:
    """Read the parts of a method card by themselves."""
    rate, expected = _read_rate(tree.get("rate")), _read_expected(tree.get("expected"))
    mended = {
        **tree,
        "rate": tree.get("rate") if rate is not None else STAND_IN_RATE,
        "expected": tree.get("expected") if expected is not None else STAND_IN_EXPECTED,
    }
    try:
        body = MethodCard.model_validate(mended)
    except ValidationError:
        body = None
    return MethodParts(body, rate, expected)


def parts_of_method(card: MethodCard) -> MethodParts:
    """All parts of a valid card."""
    return MethodParts(card, card.rate, card.expected)


def _read_rate(tree: object) -> Rate | None:
    try:
        return Rate.model_validate(tree)
    except ValidationError:
        return None


def _read_expected(tree: object) -> Expected | None:
    try:
        return Expected.model_validate(tree)
    except ValidationError:
        return None


def method_faults(parts: MethodParts) -> Iterator[Fault]:
    """Every cross rule of a method card."""
    if parts.rate is not None:
        yield from _rate_faults(parts.rate)
    if parts.expected is not None:
        yield from _expected_faults(parts.expected)
    card = parts.body
    if card is None:
        return
    yield from _span_faults(card)
    yield from _section_faults(card)
    yield from _slenderness_faults(card)
    yield from _time_faults(card)
    yield from _fracture_faults(card)
    yield from window_faults(card)
    for number, clause in enumerate(card.clauses):
        yield from _clause_faults(number, clause, card.standard)
    if parts.rate is not None and card.preload.seating_mm_min is None and parts.rate.speed_mm_min is None:
        allowed = "a speed > 0 mm/min, because rate.speed_mm_min does not give one"
        yield Fault(("preload", "seating_mm_min"), allowed, "add the speed of seating")


def _span_faults(card: MethodCard) -> Iterator[Fault]:
    support, load = card.support_span_mm, card.load_span_mm
    at = ("load_span_mm",)
    if card.geometry == "3-point":
        if load != 0.0:
            yield Fault(at, "0 mm for geometry '3-point'", "remove it, or correct geometry")
        return
    share = {"4-point-quarter": 2.0, "4-point-third": 3.0}.get(card.geometry)
    if share is not None:
        wanted = support / share
        if abs(load - wanted) > SHARE_TOLERANCE * support:
            allowed = f"{wanted:.6g} mm, the support span over {share:g}, for geometry '{card.geometry}'"
            yield Fault(at, allowed, "correct a span, or use geometry '4-point'")
    elif not 0.0 < load < support:
        allowed = f"> 0 and less than support_span_mm = {support:g} mm"
        yield Fault(at, allowed, "correct a span, or use geometry '3-point'")


def _section_faults(card: MethodCard) -> Iterator[Fault]:
    round_section = card.section != "rectangle"
    wanted = ("diameter_mm",) if round_section else ("width_mm", "thickness_mm")
    unwanted = ("width_mm", "thickness_mm") if round_section else ("diameter_mm",)
    for key in wanted:
        if getattr(card, key) is None:
            yield Fault((key,), f"the nominal size in mm for section '{card.section}'", "add this key")
    for key in unwanted:
        if getattr(card, key) is not None:
            yield Fault((key,), f"not used for section '{card.section}'", "remove it, or correct section")
    inner = card.inner_diameter_mm
    if card.section != "tube" and inner != 0.0:
        yield Fault(("inner_diameter_mm",), f"0 mm for section '{card.section}'", "remove it, or use 'tube'")
    if card.section == "tube" and card.diameter_mm is not None and not 0.0 < inner < card.diameter_mm:
        allowed = f"> 0 and less than diameter_mm = {card.diameter_mm:g} mm"
        yield Fault(("inner_diameter_mm",), allowed, "correct one of the two")
    if round_section and card.chamfer_mm != 0.0:
        yield Fault(("chamfer_mm",), f"0 mm for section '{card.section}'", "remove it")
    edges = [size for size in (card.width_mm, card.thickness_mm) if size is not None]
    if not round_section and edges and 2.0 * card.chamfer_mm >= min(edges):
        allowed = f"less than {min(edges) / 2.0:g} mm, half the smaller side"
        yield Fault(("chamfer_mm",), allowed, "correct the chamfer")


def _slenderness_faults(card: MethodCard) -> Iterator[Fault]:
    thickness = card.thickness_mm if card.section == "rectangle" else card.diameter_mm
    if thickness is not None and card.support_span_mm < SPAN_PER_THICKNESS_MIN * thickness:
        key = "thickness_mm" if card.section == "rectangle" else "diameter_mm"
        allowed = f"at most {card.support_span_mm / SPAN_PER_THICKNESS_MIN:g} mm, half the support span"
        yield Fault(
            (key,), allowed, "check thickness and span: width and thickness swapped, or another unit?"
        )


def _rate_faults(rate: Rate) -> Iterator[Fault]:
    own = {"crosshead": "speed_mm_min", "force": "rate_n_s", "stress": "rate_mpa_s"}
    key = own[rate.mode]
    if getattr(rate, key) is None:
        yield Fault(("rate", key), f"the number of mode '{rate.mode}'", "add this key")
    for mode, other in own.items():
        if mode not in (rate.mode, "crosshead") and getattr(rate, other) is not None:
            yield Fault(("rate", other), f"not used in mode '{rate.mode}'", "remove it, or correct mode")
    if rate.mode == "crosshead" and rate.loop != "frame":
        yield Fault(
            ("rate", "loop"), "'frame' in mode 'crosshead'", "remove it: the drive holds its own speed"
        )
    if rate.mode != "crosshead" and rate.loop == "midspan" and rate.speed_mm_min is None:
        allowed = "a first speed > 0 mm/min, because midspan closes the loop"
        yield Fault(("rate", "speed_mm_min"), allowed, "add the speed to start with")


def _expected_faults(expected: Expected) -> Iterator[Fault]:
    limit_mpa = STRENGTH_SHARE_MAX * 1e3 * expected.modulus_gpa
    if expected.strength_mpa > limit_mpa:
        allowed = f"at most {limit_mpa:g} MPa, a twentieth of modulus_gpa = {expected.modulus_gpa:g} GPa"
        psi = expected.strength_mpa / PSI_PER_MPA
        yield Fault(
            ("expected", "strength_mpa"), allowed, f"correct the unit (if this is psi, it is {psi:.4g} MPa)"
        )


def _time_faults(card: MethodCard) -> Iterator[Fault]:
    if card.time_to_break_s is None:
        return
    low, high = card.time_to_break_s
    if low >= high:
        do = "write [shortest, longest]"
        yield Fault(("time_to_break_s", 1), f"more than the shortest time of {low:g} s", do)
    if high > card.limits.run_s_max:
        allowed = f"at least {high:g} s, the longest time of time_to_break_s"
        yield Fault(
            ("limits", "run_s_max"),
            allowed,
            "raise it, or correct time_to_break_s",
            f"{card.limits.run_s_max:g}",
        )


def _fracture_faults(card: MethodCard) -> Iterator[Fault]:
    watch = card.fracture
    if watch.threshold_percent >= watch.lasting_percent:
        allowed = f"less than lasting_percent = {watch.lasting_percent:g} %"
        yield Fault(("fracture", "threshold_percent"), allowed, "correct one of the two")
    if watch.lasting_percent >= watch.break_percent:
        allowed = f"more than lasting_percent = {watch.lasting_percent:g} %"
        yield Fault(
            ("fracture", "break_percent"), allowed, "correct one of the two", f"{watch.break_percent:g}"
        )


def _clause_faults(number: int, clause: Clause, standard: str) -> Iterator[Fault]:
    if not clause.standard and not standard and clause.mark != "own choice":
        allowed = "the designation of a standard, here or in the card's own key 'standard'"
        yield Fault(("clauses", number, "standard"), allowed, "add it, or mark the value as 'own choice'")
    path = tuple(clause.key.split("."))
    if path[-1] not in keys_at(MethodCard, path[:-1]):
        allowed = "the dotted key of a value of this card, such as rate.speed_mm_min"
        yield Fault(("clauses", number, "key"), allowed, "correct the key")
    if clause.mark == "checked":
        for key in ("checked_by", "checked_on"):
            if not getattr(clause, key):
                yield Fault(("clauses", number, key), "needed with mark 'checked'", "sign with name and day")
    if clause.checked_on:
        try:
            dt.date.fromisoformat(clause.checked_on)
        except ValueError:
            yield Fault(
                ("clauses", number, "checked_on"), "a day of the calendar, YYYY-MM-DD", "correct the day"
            )
