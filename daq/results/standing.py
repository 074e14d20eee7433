"""Standing: what a sealed result says once the notes beside its record are taken in. Pure; nothing old is lost.

Corrected sizes and spans go through the whole reduction again, break notes give place, origin and local stress, the
method's rules are judged anew, and a person's verdict comes last. Every change carries old, new, who, when and why.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from daq.cards.notes import BreakNote, Note, merged_break_note
from daq.cards.origins import Origin, read_origin
from daq.mechanics.breakplace import BreakPlace, break_place, local_stress_mpa
from daq.results.corrections import Change, corrected_cards
from daq.results.reduce import reduce
from daq.results.rules import Consequence, Counting, Rules, rules_of
from daq.results.secondlook import explanations
from daq.results.setup import Setup, setup_from_cards
from daq.results.verdict import Evidence, Finding, Verdict, judge, remarks_from_json
from daq.stream.rundata import RunData


@dataclass(frozen=True, slots=True)
class Standing:
    """result: numbers that stand now; sealed: as they were sealed. verdict stands; by_rules is the method's own.

    strength_mpa: what enters the statistics of a bar that counts; local_mpa: nominal stress at the origin.
    """

    result: Mapping[str, Any]
    sealed: Mapping[str, Any]
    cards: Mapping[str, Any]
    setup: Setup
    verdict: Verdict
    by_rules: Verdict
    changes: tuple[Change, ...]
    remarks: tuple[str, ...]
    break_note: BreakNote | None
    place: BreakPlace | None
    origin: Origin | None
    strength_mpa: float | None
    local_mpa: float | None

    @property
    def counts(self) -> bool:
        """Whether its strength enters the statistics; a provisional one does, and is marked."""
        inside = (Counting.COUNTED, Counting.WITH_REMARK, Counting.PROVISIONAL)
        return self.strength_mpa is not None and self.verdict.counting in inside

    def as_json(self) -> dict[str, Any]:
        """The result as it stands, with what was sealed beside it where it differs."""
        before = {
            key: value
            for key, value in self.sealed.items()
            if key in self.result and self.result[key] != value
        }
        note = (
            None
            if self.break_note is None
            else self.break_note.model_dump(mode="json", exclude_defaults=True)
        )
        return {
            **self.result,
            **self.verdict.as_json(),
            "verdict_by_rules": self.by_rules.counting.value,
            "strength_counted_mpa": self.strength_mpa if self.counts else None,
            "break_from_mid_mm": None if self.place is None else self.place.from_mid_mm,
            "stress_at_origin_mpa": self.local_mpa,
            "break_note": note,
            "changes": [change.as_json() for change in self.changes],
            "remarks_in_words": list(self.remarks),
            "as_sealed": before,
        }


def standing_of(
    cards: Mapping[str, Any],
    sealed: Mapping[str, Any],
    notes: Sequence[Note] = (),
    run: Callable[[], RunData] | None = None,
    *,
    series_ratio: float | None = None,
) -> Standing:
    """cards and sealed result of a record, its notes, and its run (read only where sizes or spans were corrected).

    series_ratio: modulus over the median of the other bars, where that is off (daq.results.secondlook.off_by).
    """
    edge = rules_of(setup_from_cards(cards).method).edge_thickness
    mended, changes = corrected_cards(cards, notes, edge_thickness=edge)
    note = merged_break_note(tuple(notes))
    result = dict(sealed)
    if run is not None and mended != cards:
        result = reduce(replace(run(), cards=mended)).as_json()
    setup = setup_from_cards(mended)
    rules = rules_of(setup.method)
    place = _place(note, setup)
    by_rules = judge(_evidence(result, setup, note, place, series_ratio), rules)
    verdict, overruled = _overruled(by_rules, notes)
    strength = _strength(result, place, rules, setup)
    if strength is None and verdict.counting in (Counting.COUNTED, Counting.WITH_REMARK):
        verdict = by_rules  # nobody can count a bar that has no strength
    return Standing(
        result=result,
        sealed=sealed,
        cards=mended,
        setup=setup,
        verdict=verdict,
        by_rules=by_rules,
        changes=(*changes, *overruled),
        remarks=tuple(f"{note.remark} ({note.name}, {note.utc})" for note in notes if note.remark),
        break_note=note,
        place=place,
        origin=None if note is None or note.origin is None else read_origin(note.origin),
        strength_mpa=strength,
        local_mpa=_local_mpa(result, note, setup),
    )


# --- break, verdict, strength


def _place(note: BreakNote | None, setup: Setup) -> BreakPlace | None:
    if note is None or not note.from_mid_mm or setup.spans is None:
        return None
    try:
        return break_place(note.from_mid_mm[0], setup.spans)
    except ValueError:
        return None  # a later correction of the span left it outside: not a place any more


def _evidence(
    result: Mapping[str, Any],
    setup: Setup,
    note: BreakNote | None,
    place: BreakPlace | None,
    series_ratio: float | None,
) -> Evidence:
    told = () if series_ratio is None else explanations(series_ratio, setup.section, setup.spans)
    missing = [str(text) for text in result.get("missing") or ()]
    if result.get("failure"):
        missing.append(f"no result: {result['failure']}")
    return Evidence(
        broken=str(result.get("break_class")) in ("sudden break", "gradual failure"),
        interrupted=bool(result.get("interrupted")),
        reason=str(result.get("reason") or ""),
        break_class=str(result.get("break_class") or ""),
        remarks=remarks_from_json(result),
        missing=tuple(missing),
        has_strength=_number(result, "strength_mpa") is not None,
        from_mid_mm=None if place is None else place.from_mid_mm,
        spans=setup.spans,
        roller_diameter_mm=0.0 if setup.fixture is None else setup.fixture.roller_diameter_mm,
        edge_thickness_known=note is not None and note.edge_thickness_mm is not None,
        stiffness_ratio=series_ratio,
        stiffness_against="the series",
        explained=" or ".join(one.text for one in told),
    )


def _overruled(by_rules: Verdict, notes: Sequence[Note]) -> tuple[Verdict, tuple[Change, ...]]:
    changes = []
    verdict = by_rules
    for note in notes:
        if note.verdict is None:
            continue
        counting = Counting(note.verdict.new)
        said = Finding("overruled", f"{note.reason} ({note.name})", _weight(counting))
        verdict = Verdict(counting, (said, *by_rules.findings), note.name)
        changes.append(
            Change("verdict", note.verdict.old, note.verdict.new, note.name, note.utc, note.reason)
        )
    return verdict, tuple(changes)


def _weight(counting: Counting) -> Consequence:
    return {
        Counting.NOT_COUNTED: Consequence.NOT_COUNTED,
        Counting.WITH_REMARK: Consequence.REMARK,
    }.get(counting, Consequence.NOTHING)


def _strength(
    result: Mapping[str, Any], place: BreakPlace | None, rules: Rules, setup: Setup
) -> float | None:
    """Nominal; the stress at the break's own place where the method's rule says so."""
    strength = _number(result, "strength_mpa")
    if strength is None or place is None or setup.spans is None or not rules.place.near_local:
        return strength
    roller_mm = 0.0 if setup.fixture is None else setup.fixture.roller_diameter_mm
    outside = abs(place.from_mid_mm) > rules.place.half_mm(setup.spans, roller_mm)
    return strength * place.share if outside else strength


def _local_mpa(result: Mapping[str, Any], note: BreakNote | None, setup: Setup) -> float | None:
    """Nominal stress at the origin; at the primary break on the tension face where no origin was measured."""
    strength = _number(result, "strength_mpa")
    if strength is None or note is None or setup.section is None or setup.spans is None:
        return None
    at_mm = note.origin_from_mid_mm
    if at_mm is None and note.from_mid_mm:
        at_mm = note.from_mid_mm[0]
    if at_mm is None or abs(at_mm) > setup.spans.support_mm / 2.0:
        return None
    place = break_place(at_mm, setup.spans)
    return local_stress_mpa(strength, place, setup.section.depth_mm, note.origin_depth_mm or 0.0)


def _number(result: Mapping[str, Any], key: str) -> float | None:
    value = result.get(key)
    return None if isinstance(value, bool) or not isinstance(value, int | float) else float(value)
