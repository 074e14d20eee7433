"""A sealed record played: the view at any moment is the record's, and a picture of it is rendered off-screen."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from PySide6.QtGui import QImage
from pytestqt.qtbot import QtBot

from daq.cli.recording import recording_of
from daq.cli.window import picture
from daq.record.read import read_result, read_trace
from daq.stream.updates import Update
from monitor.playback import Player, Recording
from monitor.setting import Setting
from monitor.tracebuffer import LOAD, TIME, TraceBuffer
from tests.made_series import made_series

pytestmark = pytest.mark.slow  # the records take seconds to be made


@pytest.fixture(scope="module")
def paths(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    return made_series(tmp_path_factory.mktemp("played"), 2)


@pytest.fixture(scope="module")
def recording(paths: list[Path]) -> Recording:
    return recording_of(paths[1])


def played(player: Player, seconds: float, *, step_s: float) -> list[Update]:
    updates = []
    for _ in range(round(seconds / step_s)):
        updates += player.advance(step_s)
    return updates


@pytest.mark.parametrize("speed_turns", [-3, 0, 3])
def test_playing_tells_every_row_and_event_once_in_order(recording: Recording, speed_turns: int) -> None:
    player = Player(recording)
    player.change_speed(speed_turns)
    buffer, events = TraceBuffer(), []
    first = len(player.look()["columns"]["time_s"])
    length_s = (recording.end_s - recording.begin_s) / player.speed
    for update in played(player, 1.1 * length_s, step_s=length_s / 40.0):
        if update.kind == "trace":
            buffer.take(update.columns)
        elif update.kind == "event":
            events.append(update.body["event"])
    assert first + buffer.seen == len(recording.columns["time_s"])
    assert np.array_equal(buffer.column(TIME), recording.columns["time_s"][first:])
    wanted = [event["event"] for event in recording.events if event["time_s"] > recording.begin_s]
    assert events == [name for name in wanted if name != "run_opened"]


def test_scrubbing_back_shows_what_was_there(recording: Recording) -> None:
    player = Player(recording)
    player.seek(recording.end_s)
    break_s = recording.break_s
    assert break_s is not None
    look = player.seek(break_s - 1.0)
    assert look["state"]["state"] == "loading" and look["summary"]["moving"]
    assert not any(event["event"] == "fracture" for event in look["events"])
    assert float(look["columns"]["time_s"][-1]) <= break_s - 1.0
    bars = {bar["number"]: bar["state"] for bar in look["sitting"]["bars"]}
    assert bars == {"A-01": "broken", "A-02": "open"}
    assert look["summary"]["stress_rate_mpa_s"] > 0 and look["summary"]["expected_percent"] > 10.0


def test_speeds_stay_between_a_tenth_and_ten(recording: Recording) -> None:
    player = Player(recording)
    player.change_speed(-9)
    assert player.speed == 0.1
    player.change_speed(99)
    assert player.speed == 10.0


@pytest.mark.parametrize(("size", "theme"), [((1366, 768), "dark"), ((1920, 1080), "bright")])
def test_a_picture_is_rendered_without_a_screen(
    paths: list[Path], tmp_path: Path, qtbot: QtBot, size: tuple[int, int], theme: str
) -> None:
    target = tmp_path / "view.png"
    picture(paths[1], target, Setting(theme=theme, pixel_mm=0.25), size, None)
    image = QImage(str(target))
    assert (image.width(), image.height()) == size
    from monitor.palette import THEMES

    assert image.pixelColor(3, size[1] // 2 + 60).name() == THEMES[theme].ground
    colours = {image.pixelColor(x, y).name() for x in range(0, size[0], 7) for y in range(0, size[1], 7)}
    assert THEMES[theme].bar in colours and THEMES[theme].trace in colours and len(colours) > 20


def test_the_replay_shows_the_sealed_strength_and_obeys_its_keys(
    paths: list[Path], recording: Recording, qtbot: QtBot
) -> None:
    from daq.cli.figures import series_words
    from monitor.replay import ReplayWindow

    window = ReplayWindow(recording, series_words, Setting(pixel_mm=0.25))
    qtbot.addWidget(window)
    window.resize(1366, 768)
    window.show()
    window.orders.obey("f")
    window.still()
    strength = read_result(paths[1])["strength_mpa"]
    assert window.side.rows[0].text == f"{strength:.1f} MPa"
    assert window.trace.buffer.column(LOAD).max() == read_trace(paths[1])["force_net_n"].max()
    window.orders.obey(",")
    window.still()
    assert window.scene.ending.result is None or window.player.at_s < recording.end_s
    window.orders.obey("m")  # no frame here: nothing happens
    window.orders.stop("operator's key Space")
    window.still()
    assert "no frame listens" in window.told.line.text
