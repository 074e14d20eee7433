"""The bands across the window: state and bar, percent of the expected load, the one line, the foot. They only paint."""

from __future__ import annotations

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QPainter, QPaintEvent, QPen
from PySide6.QtWidgets import QWidget

from monitor.board import Board
from monitor.paint import CENTRE, LEFT, RIGHT, chip, tone_shape, width_px, write, write_block
from monitor.palette import BLACK, DARK, FILLS, Theme
from monitor.presenter import Line, Tone
from monitor.sizes import Sizes, sizes_for
from monitor.wording import number

GAUGE_FULL_PERCENT = 120.0
PLACE_SHARE = 0.36  # of the headline that the bar's number may take


class Band(QWidget):
    """Holds the board, the theme and the sizes; each band paints its part of them."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.board: Board | None = None
        self.theme: Theme = DARK
        self.sizes: Sizes = sizes_for(1080, 0.277)
        self.setFocusPolicy(Qt.FocusPolicy.NoFocus)

    def dress(self, theme: Theme, sizes: Sizes) -> None:
        self.theme, self.sizes = theme, sizes
        self.setFixedHeight(round(self.wanted_px()))
        self.update()

    def wanted_px(self) -> float:
        return self.sizes.state_px

    def show_board(self, board: Board) -> None:
        """Repaints only what has changed."""
        if board != self.board:
            self.board = board
            self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        del event
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.fillRect(self.rect(), QColor(self.theme.ground))
        if self.board is not None:
            self.draw(painter, self.board, QRectF(self.rect()))
        painter.end()

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        """One band's own painting."""


class Headline(Band):
    """Shape and state word at the left, the bar and its place in the series at the right."""

    def wanted_px(self) -> float:
        return 1.28 * self.sizes.state_px

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        sizes, theme = self.sizes, self.theme
        edge, side = 0.3 * sizes.chief_px, 0.82 * sizes.state_px
        shape = QRectF(edge, box.center().y() - side / 2.0, side, side)
        tone_shape(painter, shape, board.tone, theme, moving=board.moving)
        ink = theme.ink if board.current else theme.faint
        right_px = self._bar(painter, board, box, edge)
        room = QRectF(shape.right() + edge, box.top(), right_px - shape.right() - 2.0 * edge, box.height())
        rest_px = width_px(board.word_rest, sizes.chief_px) if board.word_rest else 0.0
        used = write(
            painter,
            QRectF(room.left(), room.top(), room.width() - min(rest_px, 0.42 * room.width()), room.height()),
            board.word,
            sizes.state_px,
            ink,
            bold=True,
        )
        if board.word_rest:
            left = room.left() + used + edge
            rest = QRectF(left, room.top(), room.right() - left, room.height() + 0.22 * sizes.chief_px)
            write(painter, rest, board.word_rest, sizes.chief_px, ink)

    def _bar(self, painter: QPainter, board: Board, box: QRectF, edge: float) -> float:
        """The bar's number, and its place smaller beneath it; returns where they begin."""
        sizes, theme = self.sizes, self.theme
        room = QRectF(box.right() - PLACE_SHARE * box.width(), 0.0, PLACE_SHARE * box.width() - edge, 0.0)
        rows = [(board.bar, 0.8), (board.place, 0.62)]
        widest = max(min(width_px(text, sizes.chief_px * share), room.width()) for text, share in rows)
        top = box.top() + 0.04 * box.height()
        for text, share in rows:
            high = box.height() * (0.55 if share > 0.7 else 0.41)
            room.setTop(top)
            room.setHeight(high)
            write(painter, room, text, sizes.chief_px * share, theme.ink, align=RIGHT, bold=share > 0.7)
            top += high
        return room.right() - widest


class Gauge(Band):
    """Percent of the expected break load as a bar with the break band marked on it."""

    def wanted_px(self) -> float:
        return 1.15 * self.sizes.chief_px

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        sizes, theme = self.sizes, self.theme
        edge = 0.3 * sizes.chief_px
        said = number_of(board.percent)
        number_px = width_px("188 %", sizes.chief_px, bold=True)
        words_px = min(0.24 * box.width(), 30.0 * sizes.small_px * 0.62)
        groove = QRectF(
            edge, 0.2 * box.height(), box.width() - number_px - words_px - 4.0 * edge, 0.6 * box.height()
        )
        painter.fillRect(groove, QColor(theme.panel))
        if board.band is not None:
            self._band(painter, groove, board.band)
        if board.percent is not None:
            filled = QRectF(groove)
            filled.setWidth(groove.width() * min(1.0, max(0.0, board.percent / GAUGE_FULL_PERCENT)))
            filled.adjust(0.0, 0.16 * groove.height(), 0.0, -0.16 * groove.height())
            painter.fillRect(filled, QColor(theme.trace if board.believed else theme.ghost))
        painter.setPen(QPen(QColor(theme.edge), 1.0))
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.drawRect(groove)
        hundred = groove.left() + groove.width() * 100.0 / GAUGE_FULL_PERCENT
        painter.setPen(QPen(QColor(theme.ink), max(1.5, 0.03 * sizes.chief_px)))
        painter.drawLine(
            QPointF(hundred, groove.top() - 0.1 * box.height()),
            QPointF(hundred, groove.bottom() + 0.1 * box.height()),
        )
        number_box = QRectF(groove.right() + edge, 0.0, number_px, box.height())
        write(
            painter,
            number_box,
            said,
            sizes.chief_px,
            theme.ink if board.believed else theme.faint,
            align=RIGHT,
            bold=True,
        )
        words = QRectF(number_box.right() + edge, 0.0, words_px, box.height())
        write_block(
            painter,
            words,
            board.expected.partition("% ")[2] or "expected: not known",
            sizes.small_px,
            theme.faint,
        )

    def _band(self, painter: QPainter, groove: QRectF, band: tuple[float, float]) -> None:
        low, high = (groove.left() + groove.width() * min(1.0, share / GAUGE_FULL_PERCENT) for share in band)
        strip = QRectF(low, groove.top(), max(2.0, high - low), groove.height())
        painter.fillRect(strip, QBrush(QColor(FILLS[Tone.CAUTION]), Qt.BrushStyle.BDiagPattern))
        painter.setPen(QPen(QColor(FILLS[Tone.CAUTION]), 2.0))
        for x in (low, high):
            painter.drawLine(QPointF(x, groove.top()), QPointF(x, groove.bottom()))
        hundred = groove.left() + groove.width() * 100.0 / GAUGE_FULL_PERCENT
        room = QRectF(strip.left(), strip.top(), min(strip.right(), hundred) - strip.left(), strip.height())
        if width_px("break band", self.sizes.small_px) < 0.9 * room.width():
            write(painter, room, "break band", self.sizes.small_px, self.theme.ink, align=CENTRE)


class Told(Band):
    """The one line: what to do now, or the fault with its first cause; while a key is held, how far the hold is."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.line = Line("do now", "")
        self.hold_share = 0.0
        self.hold_word = ""

    def wanted_px(self) -> float:
        return 1.5 * self.sizes.chief_px

    def say(self, line: Line, hold_share: float, hold_word: str) -> None:
        if (line, hold_share, hold_word) != (self.line, self.hold_share, self.hold_word):
            self.line, self.hold_share, self.hold_word = line, hold_share, hold_word
            self.update()

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        del board
        sizes, line = self.sizes, self.line
        loud = line.tone in (Tone.STOP, Tone.CAUTION)
        painter.fillRect(box, QColor(FILLS[line.tone] if loud else self.theme.panel))
        if self.hold_share > 0.0:
            share = QRectF(box)
            share.setWidth(box.width() * self.hold_share)
            painter.fillRect(share, QColor(FILLS[Tone.GOOD]))
        ink = BLACK if loud or self.hold_share > 0.5 else self.theme.ink
        side = 0.72 * sizes.chief_px
        shape = QRectF(0.3 * sizes.chief_px, box.center().y() - side / 2.0, side, side)
        if loud:
            painter.fillRect(shape.adjusted(-3, -3, 3, 3), QColor(self.theme.ground))
        tone_shape(painter, shape, line.tone, self.theme)
        room = box.adjusted(shape.right() + 0.3 * sizes.chief_px, 2.0, -0.3 * sizes.chief_px, -2.0)
        text = self.hold_word if self.hold_share > 0.0 else line.text
        write_block(painter, room, text, 0.86 * sizes.chief_px, ink)


class Foot(Band):
    """Small: frame, mark, age of the data, what was lost, who has the seat, where the keys are."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.words: tuple[Line, ...] = ()
        self.mark = ""

    def wanted_px(self) -> float:
        return 1.9 * self.sizes.small_px

    def say(self, mark: str, words: tuple[Line, ...]) -> None:
        if (mark, words) != (self.mark, self.words):
            self.mark, self.words = mark, words
            self.update()

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        del board
        sizes, theme = self.sizes, self.theme
        gap, left = 1.2 * sizes.small_px, 0.8 * sizes.small_px
        if self.mark:
            left += (
                chip(
                    painter,
                    QPointF(left, 0.17 * sizes.small_px),
                    self.mark,
                    sizes.small_px,
                    FILLS[Tone.CAUTION],
                )
                + gap
            )
        for line in self.words:
            if line.tone in (Tone.STOP, Tone.CAUTION):
                left += (
                    chip(
                        painter,
                        QPointF(left, 0.17 * sizes.small_px),
                        line.text,
                        sizes.small_px,
                        FILLS[line.tone],
                    )
                    + gap
                )
            else:
                room = QRectF(left, box.top(), max(0.0, box.right() - left - gap), box.height())
                left += write(painter, room, line.text, sizes.small_px, theme.faint, align=LEFT) + gap


def number_of(percent: float | None) -> str:
    return number(percent, 0, "%")
