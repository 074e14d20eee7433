"""The window against a real daemon and a virtual frame: a bar by keys alone, a stop with the station frozen."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

os.environ["QT_QPA_PLATFORM"] = "offscreen"

from PySide6.QtCore import Qt
from PySide6.QtTest import QTest

from daq.cli.figures import series_words
from daq.cli.keeper import Keeper
from daq.cli.window import desk_of
from daq.station.client import Client
from daq.station.stopline import stop_frame
from monitor.setting import Setting
from monitor.window import Outside, Window
from tests.processes.rig import Rig, rig_of, rig_series, stands_still

if TYPE_CHECKING:
    from pytestqt.qtbot import QtBot

BAR_MS = 60_000


@contextmanager
def window_of(rig: Rig, operator: str) -> Iterator[Window]:
    places = rig.outfit.places
    with Client(places) as feed:
        outside = Outside(
            feed=feed,
            stop=lambda who: stop_frame(places.frame, who),
            open_desk=desk_of(places),
            figures=series_words,
            operator=operator,
            series=rig_series() if operator else None,
            notes=Keeper(),
        )
        window = Window(outside, Setting(pixel_mm=0.277))
        window.resize(1366, 768)
        window.show()
        window.begin()
        try:
            yield window
        finally:
            window.close()


def wait_for(qtbot: QtBot, rig: Rig, test: Callable[[], bool]) -> None:
    """Qt's events and the rig's session go on meanwhile."""

    def looked() -> bool:
        rig.session.pump(0.0)
        return test()

    qtbot.waitUntil(looked, timeout=BAR_MS)


def hold_start(qtbot: QtBot, window: Window) -> None:
    QTest.keyPress(window, Qt.Key.Key_G)
    qtbot.wait(400)
    QTest.keyRelease(window, Qt.Key.Key_G)


def word(window: Window) -> str:
    return window.scene.presenter.state


def test_a_bar_by_keys_and_a_stop_past_a_frozen_station(qtbot: QtBot, tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig, window_of(rig, "A. Person") as window:
        from daq.cards.load import load_series

        bars = load_series(rig_series()).specimens
        rig.lay(bars[0].model_dump(mode="json"))
        wait_for(qtbot, rig, lambda: bool(window.scene.sitting) and word(window) == "at rest")
        break_a_bar(qtbot, rig, window)
        note_the_break(qtbot, rig, window)
        rig.lay(bars[1].model_dump(mode="json"))
        stop_past_a_frozen_station(qtbot, rig, window)
        come_back_after_the_station_was_killed(qtbot, rig, window)


def break_a_bar(qtbot: QtBot, rig: Rig, window: Window) -> None:
    QTest.keyClicks(window, "m")
    wait_for(qtbot, rig, lambda: word(window) == "ready")
    hold_start(qtbot, window)
    wait_for(qtbot, rig, lambda: word(window) == "loading")
    with window_of(rig, "") as watcher:  # joins in the middle of the run; strikes no key
        wait_for(qtbot, rig, lambda: window.scene.ending.result is not None)
        wait_for(qtbot, rig, lambda: watcher.scene.ending.result is not None)
        assert watcher.trace.column_max() == window.trace.column_max()
    qtbot.wait(400)
    result = window.scene.ending.result
    assert result is not None and result["break_class"] == "sudden break"
    assert window.side.rows[0].text == f"{result['strength_mpa']:.1f} MPa"
    assert window.inset.isVisible() and window.inset.samples >= 490
    peak = window.trace.column_max()
    assert peak == pytest.approx(result["peak_raw_n"], abs=1e-6)  # the highest sample is in the drawn trace
    assert window.scene.presenter.lost_updates == 0


def note_the_break(qtbot: QtBot, rig: Rig, window: Window) -> None:
    """By keys alone, comma or point; kept beside the sealed record, which stays as it was."""
    from daq.station.notebook import read_page

    record = Path(window.scene.ending.record)
    sealed = record.read_bytes()
    window.activateWindow()  # the watcher's window had the focus
    qtbot.waitUntil(window.isActiveWindow, timeout=5000)
    QTest.keyClicks(window, "n")
    qtbot.waitUntil(lambda: window.column.currentWidget() is window.note_form, timeout=2000)
    beam = window.scene.beam
    assert beam is not None
    wanted = beam.from_left_end(beam.support_mm / 2.0 + 2.5)
    for text in (f"{wanted:g}".replace(".", ","), "2", "P", "4", "chip seen before"):
        QTest.keyClicks(window.focusWidget(), text)
        QTest.keyClick(window.focusWidget(), Qt.Key.Key_Return)
    wait_for(qtbot, rig, lambda: window.scene.ending.verdict == "not counted")
    page = read_page(record)
    assert page.kept.problems == () and page.standing.place is not None
    assert page.standing.place.from_mid_mm == pytest.approx(2.5, abs=1e-3)
    assert [note.name for note in page.kept.notes] == ["A. Person", "A. Person"]
    assert record.read_bytes() == sealed
    assert window.column.currentWidget() is window.side


def stop_past_a_frozen_station(qtbot: QtBot, rig: Rig, window: Window) -> None:
    wait_for(qtbot, rig, lambda: word(window) == "at rest" and not window.scene.presenter.moving)
    QTest.keyClicks(window, "m")
    wait_for(qtbot, rig, lambda: word(window) == "ready")
    hold_start(qtbot, window)
    wait_for(qtbot, rig, lambda: word(window) == "loading")
    station = rig.supervisor.pids["station"]
    os.kill(station, signal.SIGSTOP)
    try:
        assert rig.hands(query=True)["inputs"]["moving"]
        struck_s = time.monotonic()
        QTest.keyPress(window, Qt.Key.Key_Space)
        assert stands_still(rig)
        assert (
            time.monotonic() - struck_s < 0.9
        )  # before the bench would have stopped for the station's silence
        qtbot.waitUntil(lambda: "STOP sent" in window.told.line.text, timeout=2000)
    finally:
        os.kill(station, signal.SIGCONT)


def come_back_after_the_station_was_killed(qtbot: QtBot, rig: Rig, window: Window) -> None:
    """No restart of the window: it takes seat and series again, and looks anew."""
    before = window.scene.heard
    rig.kill("station")
    wait_for(qtbot, rig, lambda: window.scene.heard < before)  # the new station counts from one
    wait_for(qtbot, rig, lambda: window.scene.presenter.state_body.get("operator") == "A. Person")
    wait_for(qtbot, rig, lambda: window.scene.presenter.state_body.get("series") == "demo-series")
