"""Break notes as typed: places on the bar, verdict and reason, and what of it becomes a note."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import pytest
from PySide6.QtCore import QPoint, Qt
from PySide6.QtTest import QTest

from daq.cards.notes import read_note
from daq.cli.keeper import Keeper
from monitor.form import number_in
from monitor.notes import check_pieces, check_verdict, places_of, said_of, told_place
from tests.monitor.test_beam import demo_beam

if TYPE_CHECKING:
    from pytestqt.qtbot import QtBot

BEAM = replace(demo_beam(), length_mm=50.0, length_known=True)
EMPTY = {"at": "", "pieces": "", "origin": "", "verdict": "", "reason": ""}


@pytest.mark.parametrize(
    ("text", "value"), [("12.03", 12.03), ("12,03", 12.03), (" 12,03 mm", 12.03), ("0", 0.0)]
)
def test_comma_point_and_unit_are_taken(text: str, value: float) -> None:
    assert number_in(text, 0.0, 50.0) == value


@pytest.mark.parametrize("text", ["", "x", "1e3", "nan", "inf", "-1", "51", "1.2.3", "12 03", "1_0"])
def test_anything_else_is_refused(text: str) -> None:
    assert number_in(text, 0.0, 50.0) is None


def test_places_are_on_the_bar_or_none_at_all() -> None:
    assert places_of("12.5 31,25", BEAM) == (12.5, 31.25)
    assert places_of("12.5; 31", BEAM) == (12.5, 31.0)
    assert places_of("12.5 60", BEAM) == () and places_of("12.5 x", BEAM) == ()


def test_what_is_typed_becomes_notes_that_the_store_reads() -> None:
    said = said_of(
        {**EMPTY, "at": "27,5", "pieces": "2", "verdict": "4", "reason": "chip"}, BEAM, "A. Person"
    )
    notes = [read_note({**one, "utc": "2026-01-01T00:00:00Z", **old(one)}) for one in said]
    assert notes[0].break_note is not None and notes[0].break_note.from_mid_mm == (2.5,)
    assert (
        notes[1].verdict is not None and notes[1].verdict.new == "not counted" and notes[1].reason == "chip"
    )


def old(one: dict[str, object]) -> dict[str, object]:
    return {"verdict": {"new": "not counted", "old": "provisional"}} if "verdict" in one else {}


def test_an_empty_form_says_nothing() -> None:
    assert said_of(EMPTY, BEAM, "A. Person") == []


def test_a_place_is_told_with_its_share_of_the_stress() -> None:
    assert told_place(BEAM, 25.0) == "25 mm: inside the inner span, 100 % of the highest stress"
    assert told_place(BEAM, 10.0) == "10 mm: OUTSIDE the inner span, 50 % of the highest stress"


def test_checks_say_what_is_allowed() -> None:
    assert check_pieces("2") == "" and "1 to 1000" in check_pieces("0") and "1 to 1000" in check_pieces("two")
    assert check_verdict("3") == "" and "2 counted" in check_verdict("7")


def test_a_click_on_the_drawing_marks_the_break_and_opens_the_note(qtbot: QtBot) -> None:
    from tests.monitor.window_rig import WindowRig

    rig = WindowRig(notes=Keeper())
    window = rig.window
    window.resize(1366, 768)
    window.show()
    rig.load(300.0)
    window._posed_s = float("-inf")
    window.turn()
    click(rig, 10.0)
    assert window.scene.breaks_mm == ()  # nothing is marked on a bar that is whole
    rig.break_bar(452.0)
    window._posed_s = window._numbers_s = float("-inf")
    window.turn()
    click(rig, 10.0)
    beam = window.scene.beam
    assert beam is not None
    assert window.scene.breaks_mm == pytest.approx((beam.from_left_end(10.0),), abs=0.1)
    assert window.note_form.values()["at"] == f"{window.scene.breaks_mm[0]:g}"
    assert window.column.currentWidget() is window.note_form
    window.close()


def click(rig: object, place_mm: float) -> None:
    drawing = rig.window.drawing  # type: ignore[attr-defined]
    scale = drawing.scale()
    QTest.mouseClick(
        drawing, Qt.MouseButton.LeftButton, pos=QPoint(round(scale.x(place_mm)), round(scale.face_px - 5))
    )
