"""The series strip: every bar in its order with its strength and its verdict, and what the series has come to."""

from __future__ import annotations

from collections.abc import Container, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QPainter, QPen, QPolygonF

from monitor.bands import Band
from monitor.board import Board
from monitor.paint import CENTRE, write, write_block
from monitor.palette import FILLS
from monitor.presenter import Tone

BARS_SHOWN_MAX = 60
WORDS_SHARE = 0.27
KINDS = {"provisional": "provisional", "counted with remark": "remark", "not counted": "not counted"}
FLOOR_SHARE = 0.55  # of the lowest strength: where the columns begin


@dataclass(frozen=True, slots=True)
class Cell:
    """One bar. kind: waiting, open, broken, interrupted; of a broken one also provisional, remark, not counted."""

    number: str
    kind: str
    strength_mpa: float | None = None


def cells_of(
    sitting: Mapping[str, Any] | None, verdicts: Mapping[str, str], *, hide: Container[str] = ()
) -> tuple[Cell, ...]:
    """From the station's sitting. verdicts: as they stand, by bar; hide: bars whose strength waits for a verdict."""
    cells = []
    for bar in (sitting or {}).get("bars", ()):
        number, result = str(bar["number"]), bar.get("result") or {}
        kind = {"broken": "broken", "interrupted": "interrupted", "open": "open", "sealing": "open"}.get(
            str(bar["state"]), "waiting"
        )
        strength = result.get("strength_mpa") if kind == "broken" and number not in hide else None
        if kind == "broken":
            kind = KINDS.get(verdicts.get(number) or str(result.get("verdict")), "broken")
        cells.append(Cell(number, kind, strength))
    return tuple(cells)


class Strip(Band):
    """Columns as high as the strengths. Full: counted; hatched: provisional; empty with a cross: not counted."""

    def __init__(self) -> None:
        super().__init__()
        self.cells: tuple[Cell, ...] = ()
        self.words = ""

    def wanted_px(self) -> float:
        return max(4.6 * self.sizes.small_px, self.sizes.px(24.0))

    def say(self, cells: Sequence[Cell], words: str) -> None:
        if (tuple(cells), words) != (self.cells, self.words):
            self.cells, self.words = tuple(cells), words
            self.update()

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        del board
        small = self.sizes.small_px
        words = QRectF(
            box.right() - WORDS_SHARE * box.width(),
            box.top(),
            WORDS_SHARE * box.width() - small,
            box.height(),
        )
        write_block(painter, words, self.words or "no bar is broken yet", small, self.theme.ink)
        room = QRectF(
            box.left() + small,
            box.top() + 0.2 * small,
            words.left() - box.left() - 2.0 * small,
            box.height() - 0.4 * small,
        )
        cells = self.cells[-BARS_SHOWN_MAX:]
        if not cells:
            write(painter, room, "no series is open", small, self.theme.faint)
            return
        wide = min(room.width() / len(cells), 9.0 * small)
        known = [cell.strength_mpa for cell in cells if cell.strength_mpa is not None]
        floor, top = (FLOOR_SHARE * min(known), max(known)) if known else (0.0, 1.0)
        for place, cell in enumerate(cells):
            column = QRectF(room.left() + place * wide, room.top(), wide, room.height())
            share = 0.0 if cell.strength_mpa is None else (cell.strength_mpa - floor) / max(1e-9, top - floor)
            self._cell(painter, column, cell, share)

    def _cell(self, painter: QPainter, box: QRectF, cell: Cell, share: float) -> None:
        small, theme = self.sizes.small_px, self.theme
        room = box.adjusted(2.0, 0.0, -2.0, -1.35 * small)
        ink = QColor(theme.trace)
        if cell.strength_mpa is not None:
            bar = QRectF(room)
            bar.setTop(room.bottom() - max(4.0, 0.72 * room.height() * share))
            painter.setPen(QPen(ink, 1.5))
            pattern = {"not counted": Qt.BrushStyle.NoBrush, "provisional": Qt.BrushStyle.BDiagPattern}.get(
                cell.kind
            )
            painter.setBrush(ink if pattern is None else QBrush(ink, pattern))
            painter.drawRect(bar)
            if box.width() > 2.6 * small:
                over = QRectF(box.left(), bar.top() - 1.25 * small, box.width(), 1.2 * small)
                write(painter, over, f"{cell.strength_mpa:.0f}", 0.9 * small, theme.ink, align=CENTRE)
        self._shape(painter, room, cell)
        name = QRectF(box.left() + 1.0, box.bottom() - 1.3 * small, box.width() - 2.0, 1.25 * small)
        shown = cell.number if box.width() > 4.0 * small else cell.number.rpartition("-")[2][-3:]
        write(
            painter, name, shown, 0.9 * small, theme.ink if cell.kind == "open" else theme.faint, align=CENTRE
        )

    def _shape(self, painter: QPainter, room: QRectF, cell: Cell) -> None:
        """Open: a frame. Interrupted: a gap between two strokes. Not counted: a cross. Remark: a triangle above."""
        side = min(0.9 * self.sizes.small_px, room.width())
        base = QRectF(room.center().x() - side / 2.0, room.bottom() - side, side, side)
        pen = QPen(QColor(self.theme.ink), 2.0)
        painter.setPen(pen)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        if cell.kind == "open":
            painter.drawRect(room.adjusted(1, 0.3 * room.height(), -1, 0))
        elif cell.kind == "interrupted":
            for x in (base.left() + 0.3 * side, base.right() - 0.3 * side):
                painter.drawLine(QPointF(x, base.top()), QPointF(x, base.bottom()))
        elif cell.kind == "not counted":
            painter.drawLine(base.topLeft(), base.bottomRight())
            painter.drawLine(base.topRight(), base.bottomLeft())
        elif cell.kind == "remark":
            painter.setBrush(QColor(FILLS[Tone.CAUTION]))
            tip = QPointF(base.center().x(), base.top())
            painter.drawPolygon(QPolygonF([tip, base.bottomRight(), base.bottomLeft()]))
        elif cell.kind == "waiting":
            painter.setPen(QPen(QColor(self.theme.edge), 1.5, Qt.PenStyle.DotLine))
            painter.drawLine(room.bottomLeft(), room.bottomRight())
