"""The window's part of notes: marks on the drawing, the form, what stands of every bar, and the ghosts of earlier ones.

Reads and keeps in a thread of its own; the store is outside (append-only notes beside the sealed record).
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from daq.errors import MidspanError
from daq.record.read import read_trace
from monitor.errands import Answer, Desk
from monitor.notes import AT, Notes, places_of, said_of, told_place
from monitor.presenter import Tone
from monitor.said import Said
from monitor.tracebuffer import thin_xy
from monitor.traceplot import GHOST_POINTS, Ghost

if TYPE_CHECKING:
    from monitor.window import Outside, Window

NOT_BROKEN = "a break note belongs to a bar that has broken and whose record is sealed"
NO_SEAT = "watching only: break notes are taken in the operator's window"


class Notebook:
    """One window's notes."""

    def __init__(self, window: Window, outside: Outside) -> None:
        self._window, self._outside = window, outside
        self._seen: set[str] = set()
        self.verdicts: dict[str, str] = {}  # as they stand, by the bar's number

    @property
    def is_kept(self) -> bool:
        """Whether marks can be kept here."""
        return self._outside.notes is not None and bool(self._outside.operator)

    def figures(self) -> str:
        """What is said of the series: not-counted bars are named, not hidden."""
        out = [number for number, verdict in self.verdicts.items() if verdict == "not counted"]
        words = self._outside.figures(self._window.scene.strengths_mpa(out))
        return f"{words}  Not counted: {', '.join(out)}" if out else words

    # --- earlier bars
    def read(self, sitting: Mapping[str, Any] | None) -> None:
        """Trace and verdict of the series' sealed records, each once."""
        for bar in (sitting or {}).get("bars", ()):
            path, number = str(bar.get("record") or ""), str(bar["number"])
            if not path or bar["state"] != "broken" or path in self._seen:
                continue
            asked = self._window.reader.ask("page", partial(page_of, Path(path), number, self._outside.notes))
            if asked:
                self._seen.add(path)

    def turn(self) -> None:
        """Answers that have come."""
        for answer in self._window.reader.answers():
            if answer.name == "page":
                self._hear_page(answer)
            elif answer.name == "sheet":
                self._window.orders.hear_sheet(answer)
            elif answer.good:
                self.stands(answer.body["number"], answer.body["said"])
                self._window.leave_page()
                self._window.tell(
                    f"{answer.body['number']}: kept; verdict {answer.body['said'].verdict}", Tone.GOOD, 4.0
                )
            else:
                self._window.note_form.say("; ".join(answer.missing) or answer.trouble)

    def _hear_page(self, answer: Answer) -> None:
        if not answer.good:
            return  # verify and the strip say which record does not read
        number = answer.body["number"]
        if number != self._window.scene.ending.specimen:
            self._window.trace.add_ghost(answer.body["ghost"])
        said = answer.body["said"]
        if said is not None:
            self.verdicts[number] = said.verdict
            if said.notes:
                self.stands(number, said)

    def stands(self, number: str, said: Said) -> None:
        scene = self._window.scene
        self.verdicts[number] = said.verdict
        scene.judged(number)
        if number == scene.ending.specimen:
            scene.ending.verdict = said.verdict
            if scene.beam is not None and said.from_mid_mm:
                middle_mm = scene.beam.support_mm / 2.0
                scene.breaks_mm = tuple(
                    round(scene.beam.from_left_end(middle_mm + at), 3) for at in said.from_mid_mm
                )

    # --- the bar on the screen
    def open(self) -> None:
        """The form beside the frozen trace; no dialog."""
        scene, window = self._window.scene, self._window
        if not self.is_kept:
            window.tell(NO_SEAT, Tone.PLAIN, 4.0)
        elif not scene.ending.is_broken or not scene.ending.record:
            window.tell(NOT_BROKEN, Tone.PLAIN, 4.0)
        else:
            verdict = scene.ending.verdict or str((scene.ending.result or {}).get("verdict") or "")
            window.note_form.open_for(scene.ending.specimen, scene.beam, scene.breaks_mm, verdict)
            window.column.setCurrentWidget(window.note_form)
            window.note_form.begin()

    def mark(self, end_mm: float) -> None:
        """Clicked on the drawing."""
        scene, window = self._window.scene, self._window
        scene.breaks_mm = (end_mm,)
        if window.column.currentWidget() is not window.note_form:
            self.open()
        window.note_form.fill({**window.note_form.values(), AT: f"{end_mm:g}"})
        self._tell_place()

    def typed(self, values: Mapping[str, str]) -> None:
        """The drawing follows what is typed."""
        beam = self._window.scene.beam
        self._window.scene.breaks_mm = places_of(values[AT], beam) if beam is not None else ()
        self._tell_place()

    def _tell_place(self) -> None:
        scene = self._window.scene
        if scene.beam is not None and scene.breaks_mm:
            self._window.note_form.say(told_place(scene.beam, scene.breaks_mm[0]))

    def filled(self, values: Mapping[str, str]) -> None:
        """Keep it; an empty form accepts what the rules say."""
        scene, window = self._window.scene, self._window
        said = said_of(values, scene.beam, self._outside.operator)
        if not said:
            scene.ending.verdict = str((scene.ending.result or {}).get("verdict") or "provisional")
            window.leave_page()
            return
        notes, number = self._outside.notes, scene.ending.specimen
        assert notes is not None
        window.reader.ask("note", partial(kept_of, Path(scene.ending.record), number, notes, said))


def page_of(path: Path, number: str, notes: Notes | None, desk: Desk) -> Mapping[str, Any]:
    """An earlier bar: its trace and what stands for it."""
    del desk
    return {"number": number, "ghost": ghost_of(path), "said": None if notes is None else notes.read(path)}


def kept_of(
    path: Path, number: str, notes: Notes, said: list[dict[str, Any]], desk: Desk
) -> Mapping[str, Any]:
    """Check and append."""
    del desk
    return {"number": number, "said": notes.take(path, said)}


def ghost_of(path: Path) -> Ghost:
    """A sealed record's trace, thinned. Raises MidspanError where it does not read."""
    columns = read_trace(path)
    if not columns:
        raise MidspanError(f"{path}: holds no trace")
    until = (
        int(columns["force_net_n"].argmax()) + 1
    )  # what comes after the highest load belongs to no other bar
    time_s, load_n = columns["time_s"][:until], columns["force_net_n"][:until]
    nothing = time_s * float("nan")
    along = columns.get("strain", columns.get("deflection_mm", nothing))[:until]
    stress = columns.get("stress_mpa", nothing)[:until]
    thin_along, thin_stress = thin_xy(along, stress, GHOST_POINTS)
    thin_time, thin_load = thin_xy(time_s - time_s[0], load_n, GHOST_POINTS)
    return Ghost(thin_along, thin_stress, thin_time, thin_load)
