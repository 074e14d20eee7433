"""One loading in words for the terminal: verdict first, then strength, break, and every change with its old value."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from daq.results.corrections import Change
from daq.results.rules import Consequence
from daq.station.notebook import Page


def standing_lines(page: Page) -> Iterator[str]:
    """In a fixed order; what is not known is said so."""
    standing, meta = page.standing, page.meta
    mark = "  SIMULATED" if meta["simulated"] else ""
    yield f"{meta['series']}  bar {meta['specimen']}  loading {meta['loading']}{mark}"
    yield from _row("verdict", f"{standing.verdict.counting.value}  ({standing.verdict.by})")
    for finding in standing.verdict.findings:
        heavy = finding.consequence is not Consequence.NOTHING
        yield from _row("", f"{finding.text}  [{finding.consequence.value}]" if heavy else finding.text)
    if standing.by_rules.counting is not standing.verdict.counting:
        yield from _row("", f"by the rules: {standing.by_rules.counting.value}")
    yield from _row("strength", _strength(page))
    yield from _row("break", _break(page))
    if standing.origin is not None:
        yield from _row("origin", f"{standing.origin.text}  {standing.origin.words}")
    if standing.local_mpa is not None:
        yield from _row("", f"nominal stress at the origin {standing.local_mpa:.4g} MPa")
    for change in standing.changes:
        yield from _row("changed", change_words(change))
    for text in standing.remarks:
        yield from _row("remark", text)
    head = f", chain head {page.kept.head}" if page.kept.head else ""
    yield from _row("notes", f"{len(page.kept.notes)}{head}")


def _row(head: str, text: str) -> Iterator[str]:
    yield f"  {head:<9} {text}"


def _strength(page: Page) -> str:
    standing = page.standing
    if standing.strength_mpa is None:
        survived = standing.result.get("stress_survived_mpa")
        return "none" if survived is None else f"none; survived {survived:.4g} MPa"
    spread = standing.result.get("strength_u_k2_mpa")
    text = f"{standing.strength_mpa:.4g} MPa" + ("" if spread is None else f" ± {spread:.2g} MPa (k = 2)")
    sealed = standing.sealed.get("strength_mpa")
    return text if sealed == standing.strength_mpa else f"{text}; as sealed {_number(sealed)} MPa"


def _break(page: Page) -> str:
    place, note = page.standing.place, page.standing.break_note
    if place is None:
        return "position not entered"
    pieces = "" if note is None or note.pieces is None else f", {note.pieces} pieces"
    return f"{place.from_mid_mm:+.4g} mm from mid-span{pieces}"


def change_words(change: Change) -> str:
    """What, old, new, who, when, why."""
    return f"{change.what}: {_value(change.old)} -> {_value(change.new)}; {change.name}, {change.utc}: {change.reason}"


def _value(value: Any) -> str:
    if isinstance(value, list | tuple):
        return ", ".join(_number(one) for one in value) or "not recorded"
    return str(value)


def _number(value: Any) -> str:
    return f"{value:g}" if isinstance(value, int | float) else "none"
