"""The window itself, off-screen, on a made feed: what it shows in each state, and what its keys do."""

from __future__ import annotations

import itertools
import time
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
import pytest
from PySide6.QtCore import Qt
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QDialog, QLineEdit, QMessageBox, QVBoxLayout

from daq.watch.values import State
from monitor.keys import HOLD_S
from monitor.presenter import Tone
from monitor.tracebuffer import LOAD
from monitor.window import TURN_MS, Window

if TYPE_CHECKING:
    from collections.abc import Callable

    from pytestqt.qtbot import QtBot

    from tests.monitor.window_rig import WindowRig

STATES = [state.value for state in State]
STOPS = [Qt.Key.Key_Escape, Qt.Key.Key_Space]


def heard(rig: WindowRig, qtbot: QtBot, count: int = 1) -> None:
    qtbot.waitUntil(lambda: len(rig.stops) >= count, timeout=2000)


@pytest.mark.parametrize("key", STOPS)
def test_a_stop_leaves_in_every_state(rig: WindowRig, qtbot: QtBot, key: Qt.Key) -> None:
    for count, state in enumerate(STATES, 1):
        rig.be(state)
        QTest.keyPress(rig.window, key)
        heard(rig, qtbot, count)


@pytest.mark.parametrize("key", STOPS)
def test_a_stop_leaves_from_fields_and_dialogs_while_the_frame_is_not_proven_at_rest(
    rig: WindowRig, qtbot: QtBot, key: Qt.Key
) -> None:
    dialog = QDialog(rig.window)
    field = QLineEdit(dialog)
    QVBoxLayout(dialog).addWidget(field)
    question = QMessageBox(QMessageBox.Icon.Question, "?", "?", QMessageBox.StandardButton.Ok, rig.window)
    for count, (box, at) in enumerate(((dialog, field), (question, question)), 1):
        rig.be("loading", 100.0)
        box.open()
        at.setFocus()
        QTest.keyPress(at, key)
        heard(rig, qtbot, count)
        assert box.isVisible() and field.text() == ""
        box.close()


def test_at_rest_a_field_takes_the_space(rig: WindowRig, qtbot: QtBot) -> None:
    dialog = QDialog(rig.window)
    field = QLineEdit(dialog)
    dialog.open()
    field.setFocus()
    rig.be("at rest")
    QTest.keyClicks(field, "a b")
    assert field.text() == "a b" and not rig.stops
    dialog.close()


def test_old_numbers_prove_no_rest(rig: WindowRig, qtbot: QtBot) -> None:
    rig.be("at rest")
    rig.feed.lay("summary", {"data_age_s": 9.0})
    rig.window.turn()
    assert not rig.window.is_at_rest()


@pytest.mark.slow
def test_a_start_is_held_and_a_short_press_does_nothing(rig: WindowRig, qtbot: QtBot) -> None:
    rig.be("ready")
    QTest.keyPress(rig.window, Qt.Key.Key_G, delay=5)
    QTest.keyRelease(rig.window, Qt.Key.Key_G)
    qtbot.wait(round(1000 * HOLD_S) + 3 * TURN_MS)
    assert "start" not in rig.desk.commands()
    QTest.keyPress(rig.window, Qt.Key.Key_G)
    qtbot.waitUntil(lambda: "start" in rig.desk.commands(), timeout=2000)
    QTest.keyRelease(rig.window, Qt.Key.Key_G)
    assert rig.desk.commands().count("start") == 1


@pytest.mark.slow
def test_a_refused_start_lists_what_is_missing(rig: WindowRig, qtbot: QtBot) -> None:
    rig.desk.refuses["start"] = ("state is at rest", "shield open is active")
    QTest.keyPress(rig.window, Qt.Key.Key_G)
    qtbot.waitUntil(lambda: "shield open is active" in rig.window.told.line.text, timeout=2000)
    assert "state is at rest" in rig.window.told.line.text
    QTest.keyRelease(rig.window, Qt.Key.Key_G)


@pytest.mark.parametrize("state", STATES)
def test_a_scanner_moves_nothing_in_any_state(rig: WindowRig, qtbot: QtBot, state: str) -> None:
    """Scenario 17: the burst "12.03" and Enter, and letters that are commands when struck alone."""
    rig.be(state)
    before = rig.desk.commands()
    struck = itertools.count(time.monotonic(), 0.005)  # a device's pace, however busy the computer is
    rig.window.filter.clock = lambda: next(struck)
    for burst in ("12.03", "gbmC", "mm"):
        QTest.keyClicks(rig.window, burst)
        QTest.keyClick(rig.window, Qt.Key.Key_Return)
    for _ in range(4):
        qtbot.wait(30)
        rig.window.turn()
    assert rig.desk.commands() == before and not rig.stops


@pytest.mark.slow
def test_watching_only_moves_nothing_but_stops(watcher: WindowRig, qtbot: QtBot) -> None:
    watcher.be("ready")
    QTest.keyPress(watcher.window, Qt.Key.Key_G)
    qtbot.waitUntil(lambda: "watching only" in watcher.window.told.line.text, timeout=2000)
    QTest.keyRelease(watcher.window, Qt.Key.Key_G)
    for key in (Qt.Key.Key_M, Qt.Key.Key_R):
        watcher.window.be_quiet()
        watcher.window.turn()
        QTest.keyClick(watcher.window, key)
        qtbot.waitUntil(lambda: "watching only" in watcher.window.told.line.text, timeout=5000)
    assert watcher.desk.commands() == []
    QTest.keyPress(watcher.window, Qt.Key.Key_Space)
    heard(watcher, qtbot)


def test_a_stop_that_does_not_leave_says_so(rig: WindowRig, qtbot: QtBot) -> None:
    rig.stop_answer = "no answer from the bench process"
    rig.be("loading", 100.0)
    QTest.keyPress(rig.window, Qt.Key.Key_Space)
    qtbot.waitUntil(lambda: "EMERGENCY STOP AT THE MACHINE" in rig.window.told.line.text, timeout=2000)
    assert rig.window.told.line.tone is Tone.STOP


def test_the_trace_fills_and_the_break_is_looked_at_whole(rig: WindowRig, qtbot: QtBot) -> None:
    rig.break_bar(460.0)
    window = rig.window
    window._numbers_s = window._posed_s = float("-inf")
    window.turn()
    assert window.trace.buffer.seen == 3500 and window.trace.buffer.column(LOAD).max() == 460.0
    assert window.inset.isVisible() and window.inset.samples == 501  # both ends
    rows = {row.label: row.text for row in window.side.rows}
    assert rows["class"] == "sudden break" and rows["crosshead"] == "stands still, after 0.18 s"
    assert rows["on the bar"].startswith("unloaded") and window.side.rows[0].text == "383.3 MPa"
    assert window.drawing.posture.broken and not window.drawing.posture.may_mark  # nobody keeps notes here


def test_the_next_bar_becomes_the_ghost_of_the_last(rig: WindowRig, qtbot: QtBot) -> None:
    from tests.monitor.window_rig import opened

    rig.break_bar(460.0)
    rig.feed.lay("event", opened("DEMO-02"))
    rig.window.turn()
    window = rig.window
    assert len(window.trace.buffer) == 0 and len(window.trace._ghosts) == 1 and not window.inset.isVisible()
    assert float(np.nanmax(window.trace._ghosts[0].load_n)) == 460.0
    assert not window.drawing.posture.broken or window.scene.ending.fracture is None


def test_silence_is_grey_and_says_not_current_and_comes_back(rig: WindowRig, qtbot: QtBot) -> None:
    from monitor.board import board_of

    rig.load(200.0)
    presenter, now_s = rig.window.scene.presenter, rig.window.scene.presenter._heard_s
    assert board_of(presenter, now_s + 2.9).current
    old = board_of(presenter, now_s + 3.1)
    assert not old.current and "not current" in old.word_rest and old.tone is Tone.OLD
    assert board_of(presenter, now_s + 11.0).word == "station silent"
    rig.be("loading", 210.0)
    assert board_of(presenter, presenter._heard_s).current


def test_numbers_of_a_lost_signal_are_grey_and_said_to_be_worthless(rig: WindowRig, qtbot: QtBot) -> None:
    from monitor.board import board_of

    presenter = rig.window.scene.presenter
    for state, believed in (("loading", True), ("signal lost", False), ("stopped", True)):
        rig.be(state, 210.0)
        board = board_of(presenter, presenter._heard_s)
        assert board.current and board.believed is believed
        assert ("do not trust the numbers" in board.word_rest) is not believed


def test_the_break_is_marked_at_the_last_sample_that_was_the_bars() -> None:
    """The onset lies between two samples; the later one is after the drop, outside the axes."""
    from monitor.traceplot import mark_of

    mark = mark_of({"event": "fracture", "last_good_s": 7.928, "onset_s": 7.9286, "time_s": 7.938})
    assert mark is not None and mark.time_s == 7.928


def test_the_station_that_was_started_again_is_asked_for_everything(rig: WindowRig, qtbot: QtBot) -> None:
    rig.load(100.0)
    rig.desk.asked.clear()
    rig.feed.number = 0
    rig.window._look_s = float("-inf")
    rig.be("at rest", operator="")
    rig.window.orders._seated_s = float("-inf")
    qtbot.waitUntil(lambda: "sit" in rig.desk.commands(), timeout=2000)


def test_a_late_joiner_sees_the_run_so_far(qtbot: QtBot) -> None:
    from tests.monitor.window_rig import WindowRig, look_of, opened, run_of, state_body, summary_body

    rig = WindowRig(operator="")
    time_s = [place / 100.0 for place in range(300)]
    trace = {
        "time_s": time_s,
        "net_n": time_s,
        "stress_mpa": time_s,
        "strain": time_s,
        "deflection_mm": [None] * 300,
    }
    rig.desk.answer_look = look_of(
        state=None,
        opened=opened(),
        events=[{"event": "seated", "time_s": 1.0}],
        trace=trace,
    ) | {"state": state_body("loading", run=run_of(), bar=1), "summary": summary_body(200.0, moving=True)}
    rig.window.resize(1366, 768)
    rig.window.show()
    rig.window.begin()
    qtbot.waitUntil(lambda: len(rig.window.trace.buffer) == 300, timeout=5000)
    qtbot.waitUntil(
        lambda: rig.window.headline.board is not None and rig.window.headline.board.word == "loading"
    )
    assert rig.window.drawing.beam is not None and rig.window.drawing.beam.support_mm == 40.0
    rig.window.close()


@pytest.mark.slow
def test_keys_are_listed_and_pages_are_left_by_the_same_key(rig: WindowRig, qtbot: QtBot) -> None:
    window = rig.window
    for wanted in (True, False):
        QTest.keyClicks(window, "?")
        qtbot.waitUntil(partial(page_is, window, wanted), timeout=2000)
        qtbot.wait(80)


def page_is(window: Window, wanted: bool) -> bool:
    return (window.pages.currentWidget() is window.keys_page) == wanted


@pytest.mark.slow
def test_theme_trace_and_chief_number_change_by_one_key(rig: WindowRig, qtbot: QtBot) -> None:
    window = rig.window
    rig.load(200.0)

    def looks() -> tuple[object, ...]:
        return window.theme.name, window.trace.kind, window.stress_first

    before = looks()
    for place, key in enumerate("dts"):
        QTest.keyClicks(window, key)
        qtbot.waitUntil(partial(differs, looks, before, place), timeout=5000)


def differs(looks: Callable[[], tuple[object, ...]], before: tuple[object, ...], place: int) -> bool:
    return looks()[place] != before[place]


@pytest.mark.parametrize(
    ("wide", "high", "pixel_mm"), [(1366, 768, 0.252), (1920, 1080, 0.277), (3840, 2160, 0.1384)]
)
def test_chief_letters_have_their_size_on_the_glass(
    rig: WindowRig, wide: int, high: int, pixel_mm: float
) -> None:
    """17 mm capitals where the panel is high enough for 2 m (Qt's own measure of the font), else what is told."""
    from PySide6.QtGui import QFontMetricsF

    from monitor.paint import font_of
    from monitor.sizes import sizes_for

    sizes = sizes_for(high, pixel_mm)
    capital_mm = QFontMetricsF(font_of(sizes.state_px, bold=True)).capHeight() * pixel_mm
    assert capital_mm == pytest.approx(17.0 * sizes.share, rel=0.04)
    assert sizes.distance_m == pytest.approx(2.0 * sizes.share)
    assert (sizes.share == 1.0) == (high * pixel_mm >= 290.0)


def test_a_window_that_closes_while_the_frame_moves_stops_it(qtbot: QtBot) -> None:
    from tests.monitor.window_rig import WindowRig

    rig = WindowRig()
    rig.window.show()
    rig.window.begin()
    rig.be("loading", 100.0)
    rig.window.close()
    qtbot.waitUntil(lambda: len(rig.stops) == 1, timeout=2000)
    assert QApplication.instance() is not None


def test_with_verdict_first_no_strength_is_shown_before_it(qtbot: QtBot) -> None:
    from monitor.setting import Setting
    from tests.monitor.window_rig import WindowRig, opened

    rig = WindowRig(setting=Setting(pixel_mm=0.277, verdict_first=True))
    window = rig.window
    rig.break_bar(460.0)
    bars = [{"number": "DEMO-01", "state": "broken", "record": "", "result": {"strength_mpa": 383.3}}]
    window.scene.sitting = {"bars": bars}
    window._numbers_s = float("-inf")
    window.turn()
    assert window.side.rows[0].text == "waits for the verdict"
    assert window.strip.cells[0].strength_mpa is None and window.scene.strengths_mpa() == ()
    rig.feed.lay("event", opened("DEMO-02"))  # the next bar does not give it away
    window.turn()
    assert window.scene.strengths_mpa() == ()
    window.scene.judged("DEMO-01")
    assert window.scene.strengths_mpa() == (383.3,)


@pytest.mark.parametrize("state", ["unknown - look at the frame", "signal lost", "broken? - still loaded"])
def test_a_grave_state_makes_the_one_line_loud_without_a_fault(rig: WindowRig, state: str) -> None:
    rig.be(state, 100.0)
    rig.window._numbers_s = float("-inf")
    rig.window.turn()
    assert rig.window.told.line.tone is Tone.STOP and rig.window.told.line.text
