"""The look at the break: the half second around it, every sample as it came. Painted when it changes, which is once."""

from __future__ import annotations

import numpy as np
from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QColor, QPainter, QPaintEvent, QPen, QPolygonF
from PySide6.QtWidgets import QWidget

from daq.stream.block import Floats
from monitor.paint import LEFT, RIGHT, write
from monitor.palette import DARK, FILLS, Theme
from monitor.presenter import Tone
from monitor.sizes import Sizes, sizes_for
from monitor.tracebuffer import LOAD, TIME, TraceBuffer, thin_xy

HALF_S = 0.25
DOTS_MAX = 400  # more samples than that are a line without dots


class Inset(QWidget):
    """Load over time, zero at the break."""

    def __init__(self) -> None:
        super().__init__()
        self.theme: Theme = DARK
        self.sizes: Sizes = sizes_for(1080, 0.277)
        self._time_s: Floats = np.empty(0)
        self._load_n: Floats = np.empty(0)

    @property
    def samples(self) -> int:
        return len(self._time_s)

    def dress(self, theme: Theme, sizes: Sizes) -> None:
        self.theme, self.sizes = theme, sizes
        self.update()

    def show_break(self, buffer: TraceBuffer, break_s: float) -> None:
        """Take the samples from a run's newest rows."""
        table = buffer.recent(break_s - HALF_S, break_s + HALF_S)
        self._time_s, self._load_n = table[TIME] - break_s, table[LOAD]
        self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        del event
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.fillRect(self.rect(), QColor(self.theme.panel))
        self._draw(painter, QRectF(self.rect()))
        painter.end()

    def _draw(self, painter: QPainter, box: QRectF) -> None:
        small, theme = self.sizes.small_px, self.theme
        title = QRectF(
            box.left() + 0.6 * small, box.top() + 0.2 * small, box.width() - 1.2 * small, 1.4 * small
        )
        write(painter, title, f"the break, {self.samples} samples in 0.5 s", small, theme.faint, align=LEFT)
        good = np.isfinite(self._load_n)
        if good.sum() < 2:
            return
        area = box.adjusted(0.6 * small, 1.9 * small, -0.6 * small, -1.9 * small)
        low, high = float(self._load_n[good].min()), float(self._load_n[good].max())
        low = min(low, 0.0)
        span = max(high - low, 1e-9)
        write(
            painter,
            QRectF(area.left(), box.bottom() - 1.7 * small, area.width(), 1.5 * small),
            "-250 ms",
            small,
            theme.faint,
        )
        write(
            painter,
            QRectF(area.left(), box.bottom() - 1.7 * small, area.width(), 1.5 * small),
            "+250 ms",
            small,
            theme.faint,
            align=RIGHT,
        )
        painter.setPen(QPen(QColor(theme.edge), 1.0, Qt.PenStyle.DashLine))
        zero = area.bottom() - area.height() * (0.0 - low) / span
        painter.drawLine(QPointF(area.left(), zero), QPointF(area.right(), zero))
        middle = area.center().x()
        painter.setPen(QPen(QColor(FILLS[Tone.STOP]), 2.0, Qt.PenStyle.DashDotLine))
        painter.drawLine(QPointF(middle, area.top()), QPointF(middle, area.bottom()))
        x, y = thin_xy(self._time_s[good], self._load_n[good], int(area.width()))
        points = [
            QPointF(
                middle + area.width() * when / (2.0 * HALF_S),
                area.bottom() - area.height() * (load - low) / span,
            )
            for when, load in zip(x.tolist(), y.tolist(), strict=True)
        ]
        painter.setPen(QPen(QColor(theme.trace), max(1.5, self.sizes.px(0.4))))
        painter.drawPolyline(QPolygonF(points))
        if len(points) <= DOTS_MAX:
            painter.setBrush(QColor(theme.trace))
            for point in points:
                painter.drawEllipse(point, 2.0, 2.0)
