"""Qt draws off-screen here; nobody's display is touched."""

from __future__ import annotations

import os
from collections.abc import Iterator
from typing import TYPE_CHECKING

import pytest

os.environ["QT_QPA_PLATFORM"] = "offscreen"

if TYPE_CHECKING:
    from pytestqt.qtbot import QtBot

    from tests.monitor.window_rig import WindowRig


@pytest.fixture
def rig(qtbot: QtBot) -> Iterator[WindowRig]:
    """An operator's window on a made feed; turned by the test, not by its timer."""
    from tests.monitor.window_rig import WindowRig

    rig = WindowRig()
    yield from begun(rig, qtbot)


@pytest.fixture
def watcher(qtbot: QtBot) -> Iterator[WindowRig]:
    """A window without a seat."""
    from tests.monitor.window_rig import WindowRig

    yield from begun(WindowRig(operator=""), qtbot)


def begun(rig: WindowRig, qtbot: QtBot) -> Iterator[WindowRig]:
    window = rig.window
    window.resize(1366, 768)
    window.show()
    window.activateWindow()
    window.setFocus()
    window.begin()
    qtbot.waitUntil(lambda: window.scene.sitting is not None, timeout=5000)
    yield rig
    window.close()
