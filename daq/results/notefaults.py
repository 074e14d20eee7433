"""May this be noted of this loading? Asked before a note is kept; one line a fault, nothing is repaired."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from daq.cards.notes import Note, Quantity
from daq.mechanics.breakplace import break_place
from daq.results.corrections import SIZES, SPANS, fixture_in, value_of
from daq.results.rules import Counting
from daq.results.standing import Standing


def note_faults(note: Note, standing: Standing) -> tuple[str, ...]:
    """Why a note cannot be true of this loading: one line a fault; empty where it can. Ask before it is kept."""
    return (
        *_break_faults(note, standing),
        *_correction_faults(note, standing),
        *_verdict_faults(note, standing),
    )


def _break_faults(note: Note, standing: Standing) -> Iterator[str]:
    said, setup = note.break_note, standing.setup
    if said is None:
        return
    if str(standing.result.get("break_class")) not in ("sudden break", "gradual failure"):
        yield "break note: this loading broke no bar; note the loading that did"
    places = [
        *(said.from_mid_mm or ()),
        *([said.origin_from_mid_mm] if said.origin_from_mid_mm is not None else []),
    ]
    for at_mm in places:
        try:
            if setup.spans is not None:
                break_place(at_mm, setup.spans)
        except ValueError as error:
            yield str(error)
    depth_mm = None if setup.section is None else setup.section.depth_mm
    if said.origin_depth_mm is not None and depth_mm is not None and said.origin_depth_mm > depth_mm:
        yield f"origin_depth_mm = {said.origin_depth_mm:g}: 0 to {depth_mm:g} mm, the bar's thickness"


def _correction_faults(note: Note, standing: Standing) -> Iterator[str]:
    said = note.correction
    if said is None:
        return
    quantity = Quantity(said.quantity)
    now = value_of(standing.cards, quantity)
    if tuple(said.new) == now:
        yield f"{said.quantity}: is {_listed(now)} already"
    if tuple(said.old) != now:
        yield f"{said.quantity}: what stands is {_listed(now)}, not {_listed(said.old)}; look again"
    section = None if standing.setup.method is None else standing.setup.method.section
    if quantity in (Quantity.WIDTH, Quantity.CHAMFER) and section not in (None, "rectangle"):
        yield f"{said.quantity}: a bar of section {section} has none"
    if quantity is Quantity.INNER_DIAMETER and section not in (None, "tube"):
        yield f"{said.quantity}: a bar of section {section} has none"
    if quantity not in SIZES and not fixture_in(standing.cards):
        yield f"{said.quantity}: the fixture of this loading is not on its frame card"
    spans = {q: said.new[0] if q is quantity else (value_of(standing.cards, q) or (0.0,))[0] for q in SPANS}
    if quantity in SPANS and not spans[Quantity.LOAD_SPAN] < spans[Quantity.SUPPORT_SPAN]:
        yield f"{said.quantity} = {said.new[0]:g}: the load span must stay below the support span"


def _verdict_faults(note: Note, standing: Standing) -> Iterator[str]:
    said, now = note.verdict, standing.verdict.counting.value
    if said is None:
        return
    if said.old != now:
        yield f"verdict: what stands is {now!r}, not {said.old!r}; look again"
    elif said.new == now:
        yield f"verdict: is {now!r} already"
    if said.new != Counting.NOT_COUNTED.value and standing.strength_mpa is None:
        yield f"verdict: this loading has no strength ({standing.by_rules.reason}); it cannot count"


def _listed(values: Sequence[float]) -> str:
    return ", ".join(f"{value:g}" for value in values) + " mm" if values else "not recorded"
