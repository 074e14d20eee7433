"""The bar in its fixture, to scale: rollers, spans, height, the bar bending (the factor is stated), the load where it
acts, the stress at the tension face, the bending moment under the span. After the break it takes the operator's mark.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from PySide6.QtCore import QPointF, QRectF, Qt, Signal
from PySide6.QtGui import QBrush, QColor, QMouseEvent, QPainter, QPen, QPolygonF

from monitor.bands import Band
from monitor.beam import Beam, axis, shape
from monitor.board import Board
from monitor.paint import CENTRE, LEFT, RIGHT, chip, fitting_px, width_px, write
from monitor.palette import FILLS, Theme
from monitor.posture import Posture
from monitor.presenter import Tone

WIDE_SHARE = 0.86  # of the widget that bar and overhangs may take
ARROW_SHARE_MIN = 0.02  # of the expected load: below, the arrow is shorter than its head
MOMENT_SHARE_MAX = 1.25  # of the expected break load at which the diagram is cut
ROLLER_PX_MIN = 10.0


@dataclass(frozen=True, slots=True)
class Scale:
    """mm in the fixture -> pixels in the widget. x counts from the left support; y down from the bar's lower face."""

    px_mm: float
    left_px: float
    face_px: float
    moment_px: float

    def x(self, place_mm: float) -> float:
        return self.left_px + place_mm * self.px_mm

    def place_mm(self, x_px: float) -> float:
        return (x_px - self.left_px) / self.px_mm


class Drawing(Band):
    """Give it a beam, a posture and the board's numbers."""

    marked = Signal(float)  # mm from the bar's left end

    def __init__(self) -> None:
        super().__init__()
        self.beam: Beam | None = None
        self.posture = Posture()
        self.note = "no bar has been called"

    def dress(self, theme: Theme, sizes: object) -> None:
        del sizes
        self.theme = theme
        self.update()

    def fit(self, beam: Beam | None, note: str = "") -> None:
        """Another bar or fixture."""
        if (beam, note) != (self.beam, self.note):
            self.beam, self.note = beam, note
            self.update()

    def pose(self, posture: Posture) -> None:
        if posture != self.posture:
            self.posture = posture
            self.update()

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """A click on the bar after the break marks it; the mouse is never needed: `n` takes the same in mm."""
        beam, scale = self.beam, self.scale()
        if beam is None or scale is None or not self.posture.may_mark:
            return
        end_mm = beam.from_left_end(scale.place_mm(event.position().x()))
        if 0.0 <= end_mm <= beam.length_mm:
            self.marked.emit(round(end_mm, 1))

    def scale(self) -> Scale | None:
        """The largest scale at which fixture, moment and words fit; the facts stand beside the span where they can."""
        beam = self.beam
        if beam is None:
            return None
        small = self.sizes.small_px
        scale = self._scale(beam, 2.0 * small)
        needed = width_px(facts_of(beam), small) + 2.5 * small
        return scale if scale.left_px >= needed else self._scale(beam, 3.4 * small)

    def _scale(self, beam: Beam, bottom_px: float) -> Scale:
        sizes = self.sizes
        top_px = 1.1 * sizes.small_px + 8.0
        rest_px = max(40.0, self.height() - top_px - bottom_px)
        number_px = (1.0 if self.posture.stress_first else 0.8) * sizes.chief_px
        across = self.width() * WIDE_SHARE / max(beam.length_mm, beam.support_mm + beam.roller_mm)
        down = rest_px / (2.0 * beam.roller_mm + beam.height_mm)
        if beam.roller_mm * down < number_px:
            down = (rest_px - number_px) / (beam.roller_mm + beam.height_mm)
        px_mm = max(0.05, min(across, down))
        moment_px = max(number_px, beam.roller_mm * px_mm)
        used_px = (beam.roller_mm + beam.height_mm) * px_mm + moment_px
        face_px = top_px + (rest_px - used_px) / 2.0 + (beam.roller_mm + beam.height_mm) * px_mm
        return Scale(px_mm, (self.width() - beam.support_mm * px_mm) / 2.0, face_px, moment_px)

    def draw(self, painter: QPainter, board: Board, box: QRectF) -> None:
        painter.fillRect(box, QColor(self.theme.panel))
        beam, scale = self.beam, self.scale()
        if beam is None or scale is None:
            write(painter, box, self.note, self.sizes.chief_px * 0.7, self.theme.faint, align=CENTRE)
            return
        _Sketch(painter, self, board, beam, scale).draw(box)


class _Sketch:
    """One painting of the drawing."""

    def __init__(self, painter: QPainter, drawing: Drawing, board: Board, beam: Beam, scale: Scale) -> None:
        self.painter, self.board, self.beam, self.scale = painter, board, beam, scale
        self.theme, self.sizes, self.posture = drawing.theme, drawing.sizes, drawing.posture
        self.factor = beam.exaggeration
        sag_mm = self.posture.sag_mm
        self.sag_px = 0.0
        self.thin_px = max(1.2, self.sizes.px(0.35))
        if sag_mm is not None and not self.posture.broken:
            limit = 0.9 * beam.height_mm
            self.sag_px = scale.px_mm * max(-0.2 * limit, min(limit, sag_mm * self.factor))

    def draw(self, box: QRectF) -> None:
        self._moment()
        self._rollers()
        self._bar()
        self._loads()
        self._spans()
        self._breaks()
        self._numbers(box)
        self._facts(box)

    # --- fixture and bar
    def _rollers(self) -> None:
        beam, scale, painter = self.beam, self.scale, self.painter
        radius = max(ROLLER_PX_MIN, beam.roller_mm * scale.px_mm) / 2.0
        painter.setPen(QPen(QColor(self.theme.edge), max(1.5, 0.05 * radius)))
        painter.setBrush(QColor(self.theme.roller))
        for place in (0.0, beam.support_mm):
            self._roller(QPointF(scale.x(place), scale.face_px + radius), radius)
        for place in beam.loads_mm:
            down = self._sag_at(place)
            self._roller(QPointF(scale.x(place), self._top_px - radius + down), radius)

    def _roller(self, centre: QPointF, radius: float) -> None:
        self.painter.drawEllipse(centre, radius, radius)
        cross = 0.18 * radius
        self.painter.drawLine(centre - QPointF(cross, 0), centre + QPointF(cross, 0))
        self.painter.drawLine(centre - QPointF(0, cross), centre + QPointF(0, cross))

    @property
    def _top_px(self) -> float:
        return self.scale.face_px - self.beam.height_mm * self.scale.px_mm

    def _sag_at(self, place_mm: float) -> float:
        return float(self.sag_px * shape(self.beam, np.array([place_mm]))[0]) if self.sag_px else 0.0

    def _bar(self) -> None:
        beam, scale, painter = self.beam, self.scale, self.painter
        places = axis(beam)
        down = self.sag_px * shape(beam, places) if self.sag_px else np.zeros(len(places))
        high = beam.height_mm * scale.px_mm
        xs = scale.left_px + places * scale.px_mm
        lower = [QPointF(x, scale.face_px + y) for x, y in zip(xs, down, strict=True)]
        upper = [QPointF(x, scale.face_px - high + y) for x, y in zip(xs, down, strict=True)]
        painter.setPen(QPen(QColor(self.theme.ink), 1.5))
        painter.setBrush(QColor(self.theme.bar))
        painter.drawPolygon(QPolygonF([*lower, *reversed(upper)]))
        painter.setPen(QPen(QColor(self.theme.trace), max(3.0, 0.06 * high)))
        inner = [point for point, place in zip(lower, places, strict=True) if 0 <= place <= beam.support_mm]
        painter.drawPolyline(QPolygonF(inner))  # the tension face

    def _moment(self) -> None:
        """Under the span: dashed at the expected break load, filled as far as the bar is loaded."""
        beam, scale, painter = self.beam, self.scale, self.painter
        full = scale.moment_px
        corners = [0.0, *beam.loads_mm, beam.support_mm]
        depth = [0.0, *([1.0] * len(beam.loads_mm)), 0.0]
        share = 0.0 if self.posture.broken else max(0.0, min(MOMENT_SHARE_MAX, self.posture.share))
        top = scale.face_px

        def outline(part: float) -> QPolygonF:
            return QPolygonF(
                [QPointF(scale.x(x), top + full * part * d) for x, d in zip(corners, depth, strict=True)]
            )

        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(QColor(self.theme.moment))
        painter.drawPolygon(outline(min(share, 1.0)))
        painter.setBrush(QBrush(QColor(self.theme.edge), Qt.BrushStyle.VerPattern))
        painter.setOpacity(0.35)
        painter.drawPolygon(outline(min(share, 1.0)))
        painter.setOpacity(1.0)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.setPen(QPen(QColor(self.theme.edge), self.thin_px, Qt.PenStyle.DashLine))
        painter.drawPolyline(outline(1.0))

    # --- load and spans
    def _loads(self) -> None:
        """An arrow on each loading roller, as long as the load."""
        radius = max(ROLLER_PX_MIN, self.beam.roller_mm * self.scale.px_mm) / 2.0
        if self.posture.broken or self.posture.share < ARROW_SHARE_MIN:
            return
        pen = QPen(QColor(self.theme.trace), max(3.0, 0.16 * radius))
        self.painter.setPen(pen)
        for place in self.beam.loads_mm:
            x, tip = self.scale.x(place), self._top_px - radius + self._sag_at(place)
            long = radius * (0.35 + 1.1 * min(1.2, self.posture.share))
            head = 0.3 * radius
            self.painter.drawLine(QPointF(x, tip - long), QPointF(x, tip))
            self.painter.drawPolyline(
                QPolygonF([QPointF(x - head, tip - head), QPointF(x, tip), QPointF(x + head, tip - head)])
            )

    def _spans(self) -> None:
        beam, scale, small = self.beam, self.scale, self.sizes.small_px
        below = scale.face_px + max(scale.moment_px, beam.roller_mm * scale.px_mm) + 0.95 * small
        self._span(0.0, beam.support_mm, below, f"support span {beam.support_mm:g} mm")
        if beam.load_mm:
            above = self._top_px - max(ROLLER_PX_MIN, beam.roller_mm * scale.px_mm) - 0.45 * small
            first, last = beam.loads_mm
            self._span(first, last, max(0.75 * small, above), f"load span {beam.load_mm:g} mm")

    def _span(self, first_mm: float, last_mm: float, y: float, text: str) -> None:
        painter, small = self.painter, self.sizes.small_px
        left, right = self.scale.x(first_mm), self.scale.x(last_mm)
        painter.setPen(QPen(QColor(self.theme.edge), self.thin_px))
        painter.drawLine(QPointF(left, y), QPointF(right, y))
        for x in (left, right):
            painter.drawLine(QPointF(x, y - 0.35 * small), QPointF(x, y + 0.35 * small))
        wide = min(width_px(text, small) + small, right - left)
        room = QRectF((left + right - wide) / 2.0, y - 0.7 * small, wide, 1.4 * small)
        painter.fillRect(room, QColor(self.theme.panel))
        write(painter, room, text, small, self.theme.faint, align=CENTRE)

    # --- the break
    def _breaks(self) -> None:
        if not self.posture.broken:
            return
        beam = self.beam
        for number, end_mm in enumerate(self.posture.breaks_mm, 1):
            self._crack(beam.from_left_support(end_mm), dashed=False)
            self._tag(beam.from_left_support(end_mm), f"{number}: {end_mm:g} mm")
        if not self.posture.breaks_mm:
            self._crack(beam.support_mm / 2.0, dashed=True)
            self._tag(
                beam.support_mm / 2.0, "where? n: mark the break" if self.posture.may_mark else "broken"
            )

    def _crack(self, place_mm: float, *, dashed: bool) -> None:
        x, high = self.scale.x(place_mm), self.beam.height_mm * self.scale.px_mm
        step = max(4.0, 0.09 * high)
        points = [
            QPointF(
                x + (step if turn % 2 else -step) * (0 < turn < 6), self.scale.face_px - high * turn / 6.0
            )
            for turn in range(7)
        ]
        style = Qt.PenStyle.DotLine if dashed else Qt.PenStyle.SolidLine
        for colour, wide in ((self.theme.panel, 9.0), (self.theme.ink, 3.0)):
            if dashed and wide > 5.0:
                continue
            self.painter.setPen(QPen(QColor(colour), wide, style))
            self.painter.drawPolyline(QPolygonF(points))

    def _tag(self, place_mm: float, text: str) -> None:
        small, x = self.sizes.small_px, self.scale.x(place_mm)
        wide = width_px(text, small, bold=True) + 1.2 * small
        top = self.scale.face_px + 0.35 * small
        chip(self.painter, QPointF(x - wide / 2.0, top), text, small, FILLS[Tone.CAUTION])

    # --- numbers
    def _numbers(self, box: QRectF) -> None:
        """Load at the left loading roller, stress under the tension face."""
        board, beam, scale, sizes = self.board, self.beam, self.scale, self.sizes
        ink = self.theme.ink if board.believed else self.theme.faint
        chief_px, other_px = sizes.state_px, 0.8 * sizes.chief_px
        load_px, stress_px = (other_px, chief_px) if self.posture.stress_first else (chief_px, other_px)
        radius = max(ROLLER_PX_MIN, beam.roller_mm * scale.px_mm) / 2.0
        right = scale.x(beam.loads_mm[0]) - radius - 0.35 * sizes.small_px
        high = 1.2 * fitting_px(board.load, load_px, right - box.left() - sizes.small_px, bold=True)
        raised = min(0.0, self._sag_at(-beam.overhang_mm))  # the bar's ends rise when it bends
        top = max(0.0, self._top_px + raised - max(high, radius * 2.0 + raised))
        if top + high > self._top_px + raised + 0.2 * high:  # no room above the bar: beside it
            right = scale.x(-beam.overhang_mm) - 0.5 * sizes.small_px
        room = QRectF(box.left() + sizes.small_px, top, right - box.left() - sizes.small_px, high)
        write(self.painter, room, board.load, load_px, ink, align=RIGHT, bold=True)
        if self.posture.broken:
            return
        wide = beam.support_mm * scale.px_mm - 2.4 * radius
        free_px = max(0.5 * scale.moment_px, scale.moment_px - self.sag_px - 4.0)
        stress_px = min(fitting_px(board.stress, stress_px, wide, bold=True), free_px)
        text_px = width_px(board.stress, stress_px, bold=True)
        middle = scale.x(beam.support_mm / 2.0)
        patch = QRectF(
            middle - text_px / 2.0 - 8.0, scale.face_px + self.sag_px + 3.0, text_px + 16.0, 1.02 * stress_px
        )
        self.painter.fillRect(patch, QColor(self.theme.panel))
        write(self.painter, patch, board.stress, stress_px, ink, align=CENTRE, bold=True)

    def _facts(self, box: QRectF) -> None:
        """Small, at the lower edge: what is drawn."""
        beam, small = self.beam, self.sizes.small_px
        if self.posture.sag_mm is None:
            right = "to scale; deflection not measured, not drawn"
        else:
            right = f"to scale; deflection drawn x{self.factor}"
        room = QRectF(box.left() + small, box.bottom() - 1.5 * small, box.width() - 2.0 * small, 1.4 * small)
        half = QRectF(room)
        half.setWidth(0.49 * room.width())
        write(self.painter, half, facts_of(beam), small, self.theme.faint, align=LEFT)
        half.moveLeft(room.right() - half.width())
        write(self.painter, half, right, small, self.theme.faint, align=RIGHT)


def facts_of(beam: Beam) -> str:
    """Fixture and bar in a line."""
    guessed = "" if beam.length_known else ", length assumed"
    sides = " x ".join(f"{side:.3f}" for side in (beam.width_mm, beam.height_mm))
    return f"{beam.fixture}: {sides} x {beam.length_mm:g} mm{guessed}"
