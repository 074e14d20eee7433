"""Painting that several widgets share: letters that fit their place, and the shape that stands beside each tone."""

from __future__ import annotations

import math

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QColor, QFont, QFontMetricsF, QPainter, QPainterPath, QPen, QPolygonF

from monitor.palette import BLACK, FILLS, Theme
from monitor.presenter import Tone

FAMILY = "DejaVu Sans"  # figures of equal width; Qt falls back to the system's font where it is missing
SMALLEST_PX = 9.0
LEFT = Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter
RIGHT = Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter
CENTRE = Qt.AlignmentFlag.AlignHCenter | Qt.AlignmentFlag.AlignVCenter


def font_of(size_px: float, *, bold: bool = False) -> QFont:
    font = QFont(FAMILY)
    font.setPixelSize(max(1, round(size_px)))
    font.setBold(bold)
    return font


def width_px(text: str, size_px: float, *, bold: bool = False) -> float:
    return QFontMetricsF(font_of(size_px, bold=bold)).horizontalAdvance(text)


def fitting_px(text: str, size_px: float, room_px: float, *, bold: bool = False) -> float:
    """The size at which a text fits into a width: never larger than asked, never below 9 pixels."""
    wide = width_px(text, size_px, bold=bold)
    if wide <= room_px or wide <= 0:
        return size_px
    return max(SMALLEST_PX, size_px * room_px / wide * 0.99)


def write(
    painter: QPainter,
    box: QRectF,
    text: str,
    size_px: float,
    colour: str,
    *,
    align: Qt.AlignmentFlag = LEFT,
    bold: bool = False,
) -> float:
    """One line, shrunk to its box, cut with dots where even that is too long. Returns its width in pixels."""
    size_px = fitting_px(text, size_px, box.width(), bold=bold)
    font = font_of(size_px, bold=bold)
    metrics = QFontMetricsF(font)
    shown = metrics.elidedText(text, Qt.TextElideMode.ElideRight, box.width() + 1.0)
    painter.setFont(font)
    painter.setPen(QColor(colour))
    painter.drawText(box, int(align.value) | int(Qt.TextFlag.TextSingleLine.value), shown)
    return metrics.horizontalAdvance(shown)


def write_block(painter: QPainter, box: QRectF, text: str, size_px: float, colour: str) -> None:
    """A sentence in at most as many lines as fit, shrunk until it does."""
    flags = int(LEFT.value) | int(Qt.TextFlag.TextWordWrap.value)
    while True:
        font = font_of(size_px)
        needed = QFontMetricsF(font).boundingRect(box, flags, text)
        if (needed.height() <= box.height() and needed.width() <= box.width()) or size_px <= SMALLEST_PX:
            break
        size_px *= 0.94
    painter.setFont(font)
    painter.setPen(QColor(colour))
    painter.drawText(box, flags, text)


def tone_shape(painter: QPainter, box: QRectF, tone: Tone, theme: Theme, *, moving: bool = False) -> None:
    """Octagon: stop, fault. Triangle: caution. Square with tick: good. Disc: plain. Arrow: moving. Dashed ring: old."""
    painter.save()
    painter.setRenderHint(QPainter.RenderHint.Antialiasing)
    painter.setPen(Qt.PenStyle.NoPen)
    painter.setBrush(QColor(FILLS[tone]))
    mark = QPen(QColor(BLACK), max(2.0, box.width() * 0.1), Qt.PenStyle.SolidLine, Qt.PenCapStyle.RoundCap)
    mark.setJoinStyle(Qt.PenJoinStyle.RoundJoin)
    if tone is Tone.STOP:
        painter.drawPolygon(octagon(box))
        painter.setPen(mark)
        painter.drawLine(_at(box, 0.5, 0.24), _at(box, 0.5, 0.58))
        painter.drawPoint(_at(box, 0.5, 0.77))
    elif tone is Tone.CAUTION:
        painter.drawPolygon(QPolygonF([_at(box, 0.5, 0.02), _at(box, 1.0, 0.95), _at(box, 0.0, 0.95)]))
        painter.setPen(mark)
        painter.drawLine(_at(box, 0.5, 0.38), _at(box, 0.5, 0.64))
        painter.drawPoint(_at(box, 0.5, 0.81))
    elif tone is Tone.GOOD:
        painter.drawRoundedRect(box, box.width() * 0.16, box.width() * 0.16)
        painter.setPen(mark)
        painter.drawPolyline(QPolygonF([_at(box, 0.22, 0.54), _at(box, 0.42, 0.74), _at(box, 0.79, 0.28)]))
    elif tone is Tone.OLD:
        ring = QPen(QColor(theme.edge), max(2.0, box.width() * 0.08), Qt.PenStyle.DashLine)
        painter.setPen(ring)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.drawEllipse(box.adjusted(2, 2, -2, -2))
    elif moving:
        painter.drawPolygon(QPolygonF([_at(box, 0.0, 0.12), _at(box, 1.0, 0.12), _at(box, 0.5, 0.95)]))
    else:
        painter.drawEllipse(box.adjusted(1, 1, -1, -1))
    painter.restore()


def octagon(box: QRectF) -> QPolygonF:
    centre, radius = box.center(), box.width() / 2.0
    turns = [math.pi / 8.0 + eighth * math.pi / 4.0 for eighth in range(8)]
    return QPolygonF(
        [QPointF(centre.x() + radius * math.cos(t), centre.y() + radius * math.sin(t)) for t in turns]
    )


def chip(painter: QPainter, place: QPointF, text: str, size_px: float, fill: str) -> float:
    """Black letters on a filled strip, top left at `place`. Returns its width."""
    wide, high = width_px(text, size_px, bold=True) + 1.2 * size_px, 1.55 * size_px
    path = QPainterPath()
    path.addRoundedRect(QRectF(place.x(), place.y(), wide, high), 0.25 * size_px, 0.25 * size_px)
    painter.fillPath(path, QColor(fill))
    write(
        painter,
        QRectF(place.x(), place.y(), wide, high),
        text,
        size_px,
        BLACK,
        align=CENTRE,
        bold=True,
    )
    return wide


def _at(box: QRectF, across: float, down: float) -> QPointF:
    return QPointF(box.left() + across * box.width(), box.top() + down * box.height())
