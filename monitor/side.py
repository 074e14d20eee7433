"""The column beside the trace: small numbers while loading; after the break what the bar did. It only paints."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QRectF, Qt
from PySide6.QtGui import QColor, QPainter, QPaintEvent
from PySide6.QtWidgets import QWidget

from monitor.paint import LEFT, tone_shape, write, write_block
from monitor.palette import DARK, Theme
from monitor.presenter import Line, Tone
from monitor.sizes import Sizes, sizes_for

LABEL_SHARE = 0.34


class Side(QWidget):
    """Rows of label and text; the first one large where it is the chief."""

    def __init__(self) -> None:
        super().__init__()
        self.theme: Theme = DARK
        self.sizes: Sizes = sizes_for(1080, 0.277)
        self.rows: tuple[Line, ...] = ()
        self.chief = self.faint = False
        self.setFocusPolicy(Qt.FocusPolicy.NoFocus)

    def dress(self, theme: Theme, sizes: Sizes) -> None:
        self.theme, self.sizes = theme, sizes
        self.update()

    def say(self, rows: Sequence[Line], *, chief: bool, faint: bool = False) -> None:
        """chief: the first row is the number of the bar. faint: the numbers are old or not to be believed."""
        if (tuple(rows), chief, faint) != (self.rows, self.chief, self.faint):
            self.rows, self.chief, self.faint = tuple(rows), chief, faint
            self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        del event
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.fillRect(self.rect(), QColor(self.theme.panel))
        self._draw(painter)
        painter.end()

    def _draw(self, painter: QPainter) -> None:
        small, theme = self.sizes.small_px, self.theme
        box = QRectF(self.rect()).adjusted(0.8 * small, 0.5 * small, -0.8 * small, -0.5 * small)
        top = box.top()
        rows = list(self.rows)
        if self.chief and rows:
            first = rows.pop(0)
            high = 1.25 * self.sizes.chief_px
            write(painter, QRectF(box.left(), top, box.width(), 1.3 * small), first.label, small, theme.faint)
            top += 1.3 * small
            write(
                painter,
                QRectF(box.left(), top, box.width(), high),
                first.text,
                self.sizes.chief_px,
                theme.ink,
                bold=True,
            )
            top += high
        fit = max(1, int((box.bottom() - top) / (1.3 * small)))
        rows = rows[:fit]  # the first say most
        step = min(1.05 * self.sizes.chief_px, (box.bottom() - top) / max(1, len(rows)))
        for row in rows:
            self._row(painter, QRectF(box.left(), top, box.width(), step), row)
            top += step

    def _row(self, painter: QPainter, box: QRectF, row: Line) -> None:
        size, theme = 0.6 * box.height(), self.theme
        small = min(size, 1.3 * self.sizes.small_px)
        label = QRectF(box)
        label.setWidth(LABEL_SHARE * box.width())
        write(painter, label, row.label, small, theme.faint)
        text = QRectF(box)
        text.setLeft(label.right())
        if row.tone is not Tone.PLAIN:
            side = min(1.1 * size, box.height())
            shape = QRectF(text.left(), text.center().y() - side / 2.0, side, side)
            tone_shape(painter, shape, row.tone, theme)
            text.setLeft(shape.right() + 0.4 * size)
        if row.label == "remark":
            write_block(painter, text, row.text, small, theme.ink)
        else:
            write(painter, text, row.text, size, theme.faint if self.faint else theme.ink, align=LEFT)
