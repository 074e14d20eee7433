"""Corrections of sizes and spans, taken into the cards of a record. What was sealed stays; every change is listed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from daq.cards.notes import READINGS, Correction, Note, Quantity

SIZES = (Quantity.WIDTH, Quantity.THICKNESS, Quantity.INNER_DIAMETER, Quantity.CHAMFER, Quantity.LENGTH)
SPANS = (Quantity.SUPPORT_SPAN, Quantity.LOAD_SPAN)


@dataclass(frozen=True, slots=True)
class Change:
    """One thing that was said anew. old and new: plain values in the unit that the name of `what` ends with."""

    what: str
    old: Any
    new: Any
    name: str
    utc: str
    reason: str

    def as_json(self) -> dict[str, Any]:
        return {
            "what": self.what, "old": self.old, "new": self.new,
            "name": self.name, "utc": self.utc, "reason": self.reason,
        }  # fmt: skip


def corrected_cards(
    cards: Mapping[str, Any], notes: Sequence[Note], *, edge_thickness: bool = False
) -> tuple[Mapping[str, Any], tuple[Change, ...]]:
    """The cards with every correction taken in, and what was changed. The cards given stay as they are.

    edge_thickness: the method wants the smallest thickness along the broken edge, told in a break note.
    """
    mended: dict[str, Any] = dict(cards)
    changes: list[Change] = []
    for note in notes:
        if note.correction is None:
            continue
        mended = _mend(mended, note.correction)
        said = note.correction
        changes.append(
            Change(said.quantity, list(said.old), list(said.new), note.name, note.utc, note.reason)
        )
    told = _edge_thickness(notes) if edge_thickness else None
    if told is not None:
        note, new_mm = told
        old = value_of(mended, Quantity.THICKNESS)
        fix = Correction(quantity=Quantity.THICKNESS.value, old=old, new=(new_mm,))
        mended = _mend(mended, fix)
        why = "smallest thickness along the broken edge"
        changes.append(Change(fix.quantity, list(old), [new_mm], note.name, note.utc, why))
    return mended, tuple(changes)


def value_of(cards: Mapping[str, Any], quantity: Quantity) -> tuple[float, ...]:
    """What stands on the cards now; empty where nothing does."""
    if quantity in SIZES:
        found = table_of(cards, "specimen").get(quantity.value)
        if found is None and quantity is Quantity.CHAMFER:
            found = table_of(cards, "method").get(quantity.value)
    else:
        found = fixture_in(cards).get(quantity.value)
    if isinstance(found, list | tuple):
        return tuple(float(value) for value in found)
    return () if found is None else (float(found),)


def table_of(cards: Mapping[str, Any], name: str) -> Mapping[str, Any]:
    found = cards.get(name)
    return found if isinstance(found, Mapping) else {}


def fixture_in(cards: Mapping[str, Any]) -> Mapping[str, Any]:
    name = table_of(cards, "run").get("fixture")
    listed = table_of(cards, "frame").get("fixtures") or ()
    return next((one for one in listed if isinstance(one, Mapping) and one.get("name") == name), {})


def _mend(cards: dict[str, Any], said: Correction) -> dict[str, Any]:
    quantity = Quantity(said.quantity)
    value: Any = list(said.new) if quantity in READINGS else said.new[0]
    if quantity in SIZES:
        return {**cards, "specimen": {**table_of(cards, "specimen"), said.quantity: value}}
    fixture = {**fixture_in(cards), said.quantity: value}
    listed = table_of(cards, "frame").get("fixtures") or ()
    fixtures = [fixture if one.get("name") == fixture.get("name") else one for one in listed]
    return {**cards, "frame": {**table_of(cards, "frame"), "fixtures": fixtures}}


def _edge_thickness(notes: Sequence[Note]) -> tuple[Note, float] | None:
    """Of the last note that gives readings, the smallest."""
    told = [(note, note.break_note.edge_thickness_mm) for note in notes if note.break_note is not None]
    given = [(note, min(readings)) for note, readings in told if readings]
    return given[-1] if given else None
