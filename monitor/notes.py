"""The break note and the verdict, typed beside the frozen trace: where it broke, pieces, origin, verdict, reason.

Kept by whoever keeps notes outside (append-only, beside the sealed record); the window has no store of its own.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any, Protocol

from monitor.beam import Beam
from monitor.form import FieldWords, Form, number_in
from monitor.said import Said
from monitor.wording import number

PLACES_MAX = 8
VERDICTS = {"": "", "1": "", "2": "counted", "3": "counted with remark", "4": "not counted"}
VERDICT_TOLD = "1 by the rules, 2 counted, 3 with remark, 4 not counted"
AT, PIECES, ORIGIN, VERDICT, REASON = "at", "pieces", "origin", "verdict", "reason"


class Notes(Protocol):
    """Who keeps notes. Both raise MidspanError with one clear line a fault."""

    def read(self, record: Path) -> Said:
        """What stands."""

    def take(self, record: Path, said: list[dict[str, Any]]) -> Said:
        """Check all against what stands, then append all."""


class NoteForm(Form):
    """Fields for one bar."""

    def __init__(self) -> None:
        super().__init__("break note and verdict")
        self.beam: Beam | None = None

    def open_for(self, specimen: str, beam: Beam | None, breaks_mm: tuple[float, ...], verdict: str) -> None:
        """breaks_mm: marked already, from the bar's left end."""
        self.beam = beam
        self.title.setText(f"{specimen}: {verdict or 'no verdict yet'}   Esc leaves")
        self.lay(self._words())
        self.fill({AT: " ".join(f"{place:g}" for place in breaks_mm)})
        self.say(f"verdict: {VERDICT_TOLD}")
        self.begin()

    def begin(self, name: str = "") -> None:
        """What the figures of the verdict mean stands there when they are asked for."""
        super().begin(name)
        if name == VERDICT and VERDICT_TOLD not in self.wrong.text():
            self.say(f"verdict: {VERDICT_TOLD}")

    def _words(self) -> tuple[FieldWords, ...]:
        end = "left end" if self.beam is None or self.beam.length_known else "left end, length assumed"
        return (
            FieldWords(AT, f"break, mm from {end}", self._check_at, "12.5"),
            FieldWords(PIECES, "pieces", check_pieces, "2"),
            FieldWords(
                ORIGIN, "origin code", lambda text: "" if len(text) <= 60 else "at most 60 characters", "-"
            ),
            FieldWords(VERDICT, "verdict, 1 to 4", check_verdict, "1"),
            FieldWords(REASON, "reason", self._check_reason, "for 2, 3, 4"),
        )

    def _check_at(self, text: str) -> str:
        if not text:
            return ""
        if self.beam is None:
            return "the bar's cards do not read; leave it empty"
        return (
            ""
            if places_of(text, self.beam)
            else f"0 to {self.beam.length_mm:g} mm, at most {PLACES_MAX} places"
        )

    def _check_reason(self, text: str) -> str:
        wanted = bool(VERDICTS.get(self.values()[VERDICT]))
        return "why must be said where the rules are overruled" if wanted and not text else ""


def places_of(text: str, beam: Beam) -> tuple[float, ...]:
    """Places on the bar in mm from its left end; empty where one of them is none."""
    found = [number_in(word, 0.0, beam.length_mm) for word in text.replace(";", " ").split()]
    known = tuple(place for place in found if place is not None)
    return known if len(known) == len(found) <= PLACES_MAX else ()


def check_pieces(text: str) -> str:
    return "" if not text or (text.isdecimal() and 1 <= int(text) <= 1000) else "a whole number, 1 to 1000"


def check_verdict(text: str) -> str:
    return "" if text in VERDICTS else VERDICT_TOLD


def told_place(beam: Beam, end_mm: float) -> str:
    """Where a break lies, and the stress there in parts of the highest."""
    where = "inside" if beam.is_inner(end_mm) else "OUTSIDE"
    span = "the inner span" if beam.load_mm else "the roller's width"
    return f"{end_mm:g} mm: {where} {span}, {number(100.0 * beam.local_share(end_mm), 0, '%')} of the highest stress"


def said_of(values: Mapping[str, str], beam: Beam | None, name: str) -> list[dict[str, Any]]:
    """Typed fields as notes: what was left empty says nothing."""
    note: dict[str, Any] = {}
    if values[AT] and beam is not None:
        middle_mm = beam.support_mm / 2.0
        places = places_of(values[AT], beam)
        note["from_mid_mm"] = [round(beam.from_left_support(place) - middle_mm, 3) for place in places]
        note["measured"] = "from the left end" + ("" if beam.length_known else ", length assumed")
    if values[PIECES]:
        note["pieces"] = int(values[PIECES])
    if values[ORIGIN]:
        note["origin"] = values[ORIGIN]
    said: list[dict[str, Any]] = []
    if note:
        said.append({"name": name, "reason": "", "break_note": note})
    verdict = VERDICTS[values[VERDICT]]
    if verdict:
        said.append({"name": name, "reason": values[REASON], "verdict": {"new": verdict}})
    elif values[REASON]:
        said.append({"name": name, "remark": values[REASON]})
    return said
