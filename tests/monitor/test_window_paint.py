"""What is painted: each tone has a silhouette of its own, every word of the window fits, every state is told apart."""

from __future__ import annotations

from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np
import pytest
from PySide6.QtCore import QRectF
from PySide6.QtGui import QColor, QFontMetricsF, QImage, QPainter

from daq.watch.values import State
from monitor.paint import SMALLEST_PX, fitting_px, font_of, tone_shape, width_px
from monitor.palette import BRIGHT
from monitor.presenter import Tone
from monitor.sizes import sizes_for
from monitor.wording import INSTRUCTIONS

if TYPE_CHECKING:
    from pytestqt.qtbot import QtBot

    from tests.monitor.window_rig import WindowRig

SIDE = 64


def silhouette(tone: Tone, *, moving: bool = False) -> np.ndarray:
    """Which pixels a shape covers: what is left of it without any colour."""
    image = QImage(SIDE, SIDE, QImage.Format.Format_RGB32)
    image.fill(QColor("#ffffff"))
    painter = QPainter(image)
    tone_shape(painter, QRectF(2, 2, SIDE - 4, SIDE - 4), tone, BRIGHT, moving=moving)
    painter.end()
    pixels = np.frombuffer(image.constBits(), dtype=np.uint8).reshape(SIDE, SIDE, 4)
    return pixels[:, :, :3].min(axis=2) < 250


def test_tones_differ_by_shape_alone(qtbot: QtBot) -> None:
    shapes = {tone.value: silhouette(tone) for tone in Tone} | {"moving": silhouette(Tone.PLAIN, moving=True)}
    for one, other in combinations(shapes, 2):
        apart = np.logical_xor(shapes[one], shapes[other]).sum() / max(shapes[one].sum(), shapes[other].sum())
        assert apart > 0.03, (one, other, apart)


@pytest.mark.parametrize("state", [state.value for state in State])
@pytest.mark.parametrize(("wide", "high", "pixel_mm"), [(1366, 768, 0.252), (1920, 1080, 0.277)])
def test_the_state_word_keeps_most_of_its_size(
    qtbot: QtBot, state: str, wide: int, high: int, pixel_mm: float
) -> None:
    sizes = sizes_for(high, pixel_mm)
    word = state.partition(" - ")[0]
    room = 0.58 * wide - sizes.state_px  # what bar and shape leave of the headline
    assert fitting_px(word, sizes.state_px, room, bold=True) >= 0.9 * sizes.state_px, word


def test_letters_shrink_to_their_place_and_no_further_than_can_be_read(qtbot: QtBot) -> None:
    for text in INSTRUCTIONS.values():
        size = fitting_px(text, 60.0, 900.0)
        fits = QFontMetricsF(font_of(size)).horizontalAdvance(text) <= 900.0 * 1.02
        assert fits or size == SMALLEST_PX
    assert width_px("123.4 N", 40.0) == width_px("567.8 N", 40.0)  # figures of equal width: nothing jumps


@pytest.mark.slow
def test_states_look_different_without_reading_the_word(rig: WindowRig) -> None:
    """The headline's shape of the chief groups: at rest, ready, loading, stopped, and data that are not current."""
    looks = {}
    for state in ("at rest", "ready", "loading", "stopped"):
        rig.be(state, 100.0)
        rig.window._numbers_s = float("-inf")
        rig.window.turn()
        image = rig.window.headline.grab().toImage().convertToFormat(QImage.Format.Format_Grayscale8)
        height = image.height()
        row = np.frombuffer(image.constBits(), dtype=np.uint8).reshape(height, image.bytesPerLine())
        looks[state] = row[:, :height].copy()
    for one, other in combinations(looks, 2):
        assert (np.abs(looks[one].astype(int) - looks[other].astype(int)) > 40).mean() > 0.02, (one, other)
