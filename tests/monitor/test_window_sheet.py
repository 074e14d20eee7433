"""The bench sheet page: gauges type into it field by field, wrong readings keep the others, odd ones are asked."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pytest
from PySide6.QtCore import Qt
from PySide6.QtTest import QTest

from daq.cards.load import example_path
from daq.cli.benchsheet import BenchSheet
from monitor.sheet import SheetForm, following

if TYPE_CHECKING:
    from pytestqt.qtbot import QtBot

READINGS = ("4.003", "4,001", "4.002", "3.001", "3,002", "3.003")


@pytest.fixture
def sheet(tmp_path: Path) -> BenchSheet:
    for name in ("demo-series.toml", "demo-series.csv", "alumina-demo.toml"):
        (tmp_path / name).write_bytes(example_path(name).read_bytes())
    return BenchSheet(tmp_path / "demo-series.toml")


@pytest.fixture
def form(sheet: BenchSheet, qtbot: QtBot) -> SheetForm:
    form = SheetForm()
    qtbot.addWidget(form)
    form.open_for(sheet, {"DEMO-01"}, "DEMO-77")
    form.show()
    form.activateWindow()
    form.begin("width_1_mm")
    return form


def typed(form: SheetForm, text: str) -> None:
    """As a gauge does: characters, then Enter."""
    field = form.focusWidget()
    QTest.keyClicks(field, text)
    QTest.keyClick(field, Qt.Key.Key_Return)


def at(form: SheetForm) -> str:
    return next(field.words.name for field in form.fields if field.hasFocus())


def test_six_readings_of_a_gauge_go_from_field_to_field(form: SheetForm, qtbot: QtBot) -> None:
    kept: list[str] = []
    form.kept.connect(kept.append)
    for reading in READINGS:
        typed(form, reading)
    assert at(form) == "chamfer_mm"
    typed(form, "")
    typed(form, "")
    assert kept == ["DEMO-77"]
    assert [form.values()[f"width_{n}_mm"] for n in (1, 2, 3)] == ["4.003", "4,001", "4.002"]


def test_a_wrong_reading_stays_in_its_field_and_keeps_the_others(form: SheetForm, qtbot: QtBot) -> None:
    typed(form, "4.003")
    typed(form, "0")
    assert at(form) == "width_2_mm" and "above 0" in form.wrong.text()
    assert form.values()["width_1_mm"] == "4.003"
    typed(form, "4.001")  # the wrong one is marked: typing replaces it
    assert at(form) == "width_3_mm" and form.wrong.text() == ""


def test_inches_and_swapped_sides_are_not_kept(form: SheetForm, qtbot: QtBot) -> None:
    kept: list[str] = []
    form.kept.connect(kept.append)
    for reading in ("3.0", "3.0", "3.0", "4.0", "4.0", "4.0", "", ""):
        typed(form, reading)
    assert kept == [] and "swapped" in form.wrong.text() and at(form) == "width_1_mm"


def test_scatter_is_asked_and_kept_by_a_second_enter(form: SheetForm, qtbot: QtBot) -> None:
    kept: list[str] = []
    form.kept.connect(kept.append)
    for reading in ("4.003", "4.05", *READINGS[2:], "", ""):
        typed(form, reading)
    assert kept == [] and "Is that so?" in form.wrong.text()
    typed(form, "")
    assert kept == ["DEMO-77"]


def test_a_broken_bar_is_not_opened(form: SheetForm, qtbot: QtBot) -> None:
    form.fill({"number": "DEMO-01"})
    form.begin("number")
    typed(form, "DEMO-01")
    assert at(form) == "number" and "broken already" in form.wrong.text()


def test_numbers_follow() -> None:
    assert [following(number) for number in ("KL-09", "A9", "x", "")] == ["KL-10", "A10", "", ""]
