"""The page of keys: what each does, to be read at two metres. It only paints."""

from __future__ import annotations

from PySide6.QtCore import QRectF, Qt
from PySide6.QtGui import QColor, QPainter, QPaintEvent
from PySide6.QtWidgets import QWidget

from monitor.paint import LEFT, write
from monitor.palette import DARK, Theme
from monitor.sizes import Sizes, sizes_for

KEYS = (
    ("Esc, Space, pedal", "STOP, at any time, in any page"),
    ("hold g (or pedal)", "start the bar that is ready: 0.3 s"),
    ("hold b", "back the crosshead off 2 mm: 0.3 s"),
    ("m", "call the next bar: tare, then ready"),
    ("r", "reset a stop"),
    ("L", "reset: I have looked at the frame"),
    ("C", "close this run as interrupted"),
    ("1 to 9", "note in the stream, time-stamped"),
    ("n", "break note and verdict"),
    ("e", "bench sheet"),
    ("s", "stress or load large"),
    ("t", "next trace"),
    ("d", "dark or bright"),
    ("?", "these keys, and back"),
    ("q", "leave; never while the frame moves"),
)
REPLAY_KEYS = (
    ("p", "play, pause"),
    (", and .", "back, forward by a twentieth"),
    ("- and +", "slower, faster: 0.1x to 10x"),
    ("f", "to the break"),
    ("s", "stress or load large"),
    ("t", "next trace"),
    ("d", "dark or bright"),
    ("?", "these keys, and back"),
    ("q", "leave"),
)
ENTER_TOLD = "Enter moves nothing. What a gauge or scanner types can stop the frame, never start it."


class KeysPage(QWidget):
    """Two columns of keys."""

    def __init__(self, keys: tuple[tuple[str, str], ...] = KEYS) -> None:
        super().__init__()
        self.theme: Theme = DARK
        self.sizes: Sizes = sizes_for(1080, 0.277)
        self._keys = keys
        self.setFocusPolicy(Qt.FocusPolicy.NoFocus)

    def dress(self, theme: Theme, sizes: Sizes) -> None:
        self.theme, self.sizes = theme, sizes
        self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        del event
        painter = QPainter(self)
        painter.fillRect(self.rect(), QColor(self.theme.panel))
        rows = -(-len(self._keys) // 2)
        box = QRectF(self.rect()).adjusted(20, 10, -20, -10)
        step = min(box.height() / (rows + 1), 1.3 * self.sizes.chief_px)
        size = 0.66 * step
        for place, (key, what) in enumerate(self._keys):
            left = box.left() + (place // rows) * box.width() / 2.0
            top = box.top() + (place % rows) * step
            wide = 0.15 * box.width()
            write(painter, QRectF(left, top, wide, step), key, size, self.theme.ink, bold=True)
            write(
                painter,
                QRectF(left + wide + 12, top, box.width() / 2.0 - wide - 30, step),
                what,
                size,
                self.theme.ink,
            )
        told = QRectF(box.left(), box.top() + rows * step, box.width(), step)
        write(painter, told, ENTER_TOLD, size, self.theme.faint, align=LEFT)
        painter.end()
