"""The trace: stress over strain, load over time, rate over time; ghosts of earlier bars; marks; the look at the break.

We thin by extremes in time order ourselves (monitor.tracebuffer): clipping to the view and downsampling of the plotting
library assume a rising x, and an unloading branch has none.
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import Enum

import numpy as np
from PySide6.QtCore import Qt
from PySide6.QtGui import QColor
from PySide6.QtWidgets import QVBoxLayout, QWidget

from daq.stream.block import Floats
from monitor.paint import font_of
from monitor.palette import DARK, FILLS, Theme
from monitor.presenter import Tone
from monitor.sizes import Sizes, sizes_for
from monitor.tracebuffer import LOAD, STRAIN, STRESS, TIME, TraceBuffer, extremes, thin_xy

os.environ.setdefault("PYQTGRAPH_QT_LIB", "PySide6")
import pyqtgraph as pg

GHOSTS_MAX = 40
GHOST_POINTS = 300
RATES_MAX = 36_000  # an hour at ten a second
MARKS_MAX = 24
HEADROOM = 1.06
MARK_ROWS_S = 0.2
GROWTH = 1.2  # of the axes while a run grows: they move seldom, because axes cost more than the trace
RIGHT_SHARE = 0.75  # of the axis: beyond, a word stands left of its mark
DROP_S = 0.005  # of the fall after a break that a stress-strain trace still shows
LOADED_SHARE = 0.02  # of the highest stress: below, a bar is being approached


class Kind(Enum):
    STRESS_STRAIN = "stress over strain"
    LOAD_TIME = "load over time"
    RATE_TIME = "stress rate over time"


@dataclass(frozen=True, slots=True)
class Mark:
    """An event on the trace. shape: a pyqtgraph symbol, so that the kind is not told by colour alone."""

    time_s: float
    word: str
    tone: Tone
    shape: str


@dataclass(frozen=True, slots=True, eq=False)
class Ghost:
    """An earlier bar's trace: (n,) strain in parts of one (or deflection), stress and load over seconds of its run."""

    along: Floats
    stress_mpa: Floats
    time_s: Floats
    load_n: Floats


WORDS: Mapping[str, tuple[str, Tone, str]] = {
    "seated": ("seated", Tone.GOOD, "o"),
    "slip": ("slip", Tone.CAUTION, "t1"),
    "pop_in": ("pop-in", Tone.CAUTION, "d"),
    "partial_drop": ("partial drop", Tone.CAUTION, "t"),
    "glitch": ("glitch", Tone.OLD, "x"),
    "limit_outlier": ("outlier", Tone.OLD, "x"),
    "fracture": ("break", Tone.STOP, "star"),
    "second_break": ("second break", Tone.STOP, "star"),
    "second_look": ("second look", Tone.CAUTION, "s"),
    "uneven_seating": ("uneven seating", Tone.CAUTION, "t1"),
    "gap": ("samples missing", Tone.CAUTION, "t2"),
    "limit": ("limit", Tone.STOP, "h"),
    "signal_lost": ("signal lost", Tone.STOP, "h"),
    "note": ("note", Tone.PLAIN, "p"),
}


def mark_of(event: Mapping[str, object]) -> Mark | None:
    """The mark an event leaves on the trace, or None."""
    found = WORDS.get(str(event.get("event")))
    at_s = event.get(
        "last_good_s", event.get("onset_s", event.get("time_s"))
    )  # the sample after is not the bar's
    if found is None or not isinstance(at_s, int | float):
        return None
    word, tone, symbol = found
    if event.get("event") == "note":
        word = str(event.get("text", "note"))[:24]
    return Mark(float(at_s), word, tone, symbol)


class TracePlot(QWidget):
    """Takes rows and events of one run, draws them on demand: `draw` once a turn, never on each update."""

    def __init__(self) -> None:
        super().__init__()
        self.buffer = TraceBuffer()
        self.kind = Kind.STRESS_STRAIN
        self.theme: Theme = DARK
        self.sizes: Sizes = sizes_for(1080, 0.277)
        self._ghosts: deque[Ghost] = deque(maxlen=GHOSTS_MAX)
        self._marks: list[Mark] = []
        self._rates: deque[tuple[float, float]] = deque(maxlen=RATES_MAX)
        self._break_s: float | None = None
        self._drawn_rows = -1
        self._current = True
        self._right, self._along = 1.0, TIME
        self._marks_s = float("-inf")  # until then the row a mark belongs to may still be coming
        self._shown: tuple[float, float, float, float] | None = None
        self._build()

    def _build(self) -> None:
        self.plot = pg.PlotWidget(background=None)
        self.plot.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        self.plot.setMenuEnabled(False)
        self.plot.hideButtons()
        self.plot.setMouseEnabled(False, False)
        self._ghost_items: list[pg.PlotCurveItem] = []
        self.curve = pg.PlotCurveItem(antialias=False, connect="finite")
        self.head = pg.ScatterPlotItem(size=9, pxMode=True)
        self.scatter = pg.ScatterPlotItem(pxMode=True)
        self._labels: list[pg.TextItem] = []
        for item in (self.curve, self.scatter, self.head):
            self.plot.addItem(item)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.addWidget(self.plot)

    # --- in
    def begin(self, *, keep_as_ghost: bool = False) -> None:
        """A new run."""
        if keep_as_ghost and len(self.buffer):
            self.add_ghost(self.as_ghost())
        self.buffer.clear()
        self._marks.clear()
        self._marks_s = float("-inf")
        self._rates.clear()
        self._break_s = None
        self._drawn_rows = -1
        self.redraw()

    def as_ghost(self) -> Ghost:
        buffer, along = self.buffer, self.buffer.along()
        time_s = buffer.column(TIME)
        chosen = extremes((buffer.column(LOAD), buffer.column(along)), GHOST_POINTS)
        if self._break_s is not None:  # what a ghost is for ends at the break
            chosen = chosen[time_s[chosen] <= self._break_s]
        return Ghost(
            buffer.column(along)[chosen] if along != TIME else np.full(len(chosen), np.nan),
            buffer.column(STRESS)[chosen],
            time_s[chosen] - float(time_s[0]),
            buffer.column(LOAD)[chosen],
        )

    def add_ghost(self, ghost: Ghost) -> None:
        self._ghosts.append(ghost)
        self._drawn_rows = -1

    def clear_ghosts(self) -> None:
        self._ghosts.clear()
        self._drawn_rows = -1

    def take(self, columns: Mapping[str, Floats]) -> None:
        self.buffer.take(columns)

    def take_rate(self, time_s: float | None, rate_mpa_s: float | None) -> None:
        if time_s is not None and rate_mpa_s is not None:
            self._rates.append((time_s, rate_mpa_s))

    def take_event(self, event: Mapping[str, object]) -> None:
        mark = mark_of(event)
        if mark is None:
            return
        if event.get("event") == "fracture":
            onset_s = event.get("onset_s")
            self._break_s = float(onset_s) if isinstance(onset_s, int | float) else mark.time_s
        if len(self._marks) < MARKS_MAX or mark.tone is Tone.STOP:
            self._marks.append(mark)
            self._marks_s = max(self._marks_s, mark.time_s + MARK_ROWS_S)
        self._drawn_rows = -1

    def column_max(self) -> float:
        """Highest net load that is kept, N; NaN where there is none."""
        load_n = self.buffer.column(LOAD)
        return float(np.fmax.reduce(load_n)) if len(load_n) else float("nan")

    @property
    def break_s(self) -> float | None:
        return self._break_s

    # --- look
    def dress(self, theme: Theme, sizes: Sizes) -> None:
        self.theme, self.sizes = theme, sizes
        self.plot.setBackground(QColor(theme.ground))
        for side in ("left", "bottom"):
            axis = self.plot.getAxis(side)
            axis.setPen(pg.mkPen(theme.edge, width=max(1.0, sizes.px(0.3))))
            axis.setTextPen(QColor(theme.faint))
            axis.setStyle(tickFont=font_of(sizes.small_px), tickTextOffset=6)
            axis.enableAutoSIPrefix(False)
        margin = 0.7 * sizes.small_px  # half a figure of the topmost tick
        self.plot.getPlotItem().layout.setContentsMargins(0, margin, margin, 0)
        self._drawn_rows = -1
        self.redraw()

    def turn(self) -> None:
        """The next kind of trace."""
        kinds = list(Kind)
        self.kind = kinds[(kinds.index(self.kind) + 1) % len(kinds)]
        self._drawn_rows = -1
        self.redraw()

    def age(self, *, current: bool) -> None:
        if current != self._current:
            self._current = current
            self._drawn_rows = -1

    def redraw(self) -> None:
        """Draw what is new; nothing when nothing is."""
        rows = self.buffer.seen + len(self._rates) * (self.kind is Kind.RATE_TIME)
        along = self.buffer.along()
        if rows == self._drawn_rows and along == self._along:
            return
        whole = self._drawn_rows < 0 or along != self._along
        self._along = along
        self._drawn_rows = rows
        x, y = self.xy()
        pen = pg.mkPen(
            self.theme.trace if self._current else self.theme.ghost, width=max(2.0, self.sizes.px(0.55))
        )
        if not self._current:
            pen.setStyle(Qt.PenStyle.DashLine)
        self.curve.setData(x, y, pen=pen, connect="finite")
        newest = np.flatnonzero(np.isfinite(x) & np.isfinite(y))[-1:]
        shown = self._break_s is None
        self.head.setSize(max(9.0, self.sizes.px(2.2)))
        self.head.setData(
            x[newest] if shown else [], y[newest] if shown else [], brush=pg.mkBrush(self.theme.ink), pen=None
        )
        if whole:
            self._label_axes()
            self._draw_ghosts()
            self._shown = None
        self._reach(x, y)
        times = self.buffer.column(TIME)
        if whole or (len(times) and float(times[-1]) < self._marks_s):
            self._draw_marks()

    def xy(self) -> tuple[Floats, Floats]:
        """What is drawn now, thinned, in the units of the axes."""
        width, buffer = max(100, self.plot.width()), self.buffer
        if self.kind is Kind.RATE_TIME:
            table = np.array(self._rates, dtype=np.float64).reshape(-1, 2)
            start = self._start_s
            return thin_xy(table[:, 0] - start, table[:, 1], width)
        if self.kind is Kind.LOAD_TIME or buffer.along() == TIME:
            x, y = buffer.drawn(TIME, LOAD if self.kind is Kind.LOAD_TIME else STRESS, width)
            return x - self._start_s, y
        row = len(buffer)
        if self._break_s is not None:  # after the break the displacement is no longer the bar's
            row = int(np.searchsorted(buffer.column(TIME), self._break_s + DROP_S))
        x, y = thin_xy(buffer.column(buffer.along())[:row], buffer.column(STRESS)[:row], width)
        return 1e3 * x, y

    @property
    def _start_s(self) -> float:
        times = self.buffer.column(TIME)
        return float(times[0]) if len(times) else 0.0

    def _label_axes(self) -> None:
        along = self.buffer.along()
        bottom = {TIME: "time  s", STRAIN: "strain  mm/m"}.get(along, "deflection  µm")
        left = "stress  MPa"
        if self.kind is not Kind.STRESS_STRAIN:
            bottom, left = "time  s", "load  N" if self.kind is Kind.LOAD_TIME else "stress rate  MPa/s"
        style = {"color": self.theme.faint, "font-size": f"{round(self.sizes.small_px)}px"}
        self.plot.setLabel("bottom", bottom, **style)
        self.plot.setLabel("left", left, **style)

    def _draw_ghosts(self) -> None:
        for item in self._ghost_items:
            self.plot.removeItem(item)
        self._ghost_items = []
        pen = pg.mkPen(self.theme.ghost, width=1)
        for ghost in self._ghosts:
            x, y = self._ghost_xy(ghost)
            x, y = thin_xy(x, y, GHOST_POINTS // 2)
            item = pg.PlotCurveItem(x, y, pen=pen, connect="finite")
            item.setZValue(-10)
            self._ghost_items.append(item)
            self.plot.addItem(item, ignoreBounds=True)

    def _ghost_xy(self, ghost: Ghost) -> tuple[Floats, Floats]:
        if self.kind is Kind.STRESS_STRAIN and np.isfinite(ghost.along).any():
            return 1e3 * ghost.along, ghost.stress_mpa
        if self.kind is Kind.LOAD_TIME:
            return ghost.time_s, ghost.load_n
        return np.empty(0), np.empty(0)

    def _draw_marks(self) -> None:
        spots, labels = [], []
        for mark in self._marks if self.kind is not Kind.RATE_TIME else ():
            row = self.buffer.row_at(mark.time_s)
            if row is None:
                continue
            x, y = self._place(row)
            if not (np.isfinite(x) and np.isfinite(y)):
                continue
            fill = FILLS[mark.tone]
            spots.append(
                {
                    "pos": (x, y),
                    "symbol": mark.shape,
                    "size": max(10.0, self.sizes.px(2.6)),
                    "brush": fill,
                    "pen": self.theme.ink,
                }
            )
            labels.append((x, y, mark.word))
        self.scatter.setData(spots)
        self._write_labels(labels)

    def _place(self, row: int) -> tuple[float, float]:
        buffer, along = self.buffer, self.buffer.along()
        if self.kind is Kind.LOAD_TIME or along == TIME:
            place = LOAD if self.kind is Kind.LOAD_TIME else STRESS
            return float(buffer.column(TIME)[row]) - self._start_s, float(buffer.column(place)[row])
        return 1e3 * float(buffer.column(along)[row]), float(buffer.column(STRESS)[row])

    def _write_labels(self, labels: Sequence[tuple[float, float, str]]) -> None:
        while len(self._labels) < len(labels):
            item = pg.TextItem(anchor=(0, 0.5))
            self._labels.append(item)
            self.plot.addItem(item, ignoreBounds=True)
        for item, label in zip(self._labels, labels, strict=False):
            item.setFont(font_of(self.sizes.small_px))
            at_right = label[0] > RIGHT_SHARE * self._right
            item.setAnchor((1.0 if at_right else 0.0, 0.5))
            item.setText(f"{label[2]}  " if at_right else f"  {label[2]}", color=self.theme.ink)
            item.setPos(label[0], label[1])
            item.show()
        for item in self._labels[len(labels) :]:
            item.hide()

    def _reach(self, x: Floats, y: Floats) -> None:
        """Axes that hold the run and the ghosts; once the bar is broken, what comes after does not move them."""
        if self._break_s is not None and self.kind is not Kind.RATE_TIME and len(self.buffer):
            times = self.buffer.column(TIME)
            row = int(np.searchsorted(times, self._break_s))
            share = self._until(row)
            x, y = share if len(share[0]) else (x, y)
        parts = [(x, y), *(self._ghost_xy(ghost) for ghost in self._ghosts)]
        spans = [span for one in parts if (span := span_of(*one)) is not None]
        if not spans:
            return
        left, bottom = (float(one) for one in np.min(spans, axis=0)[:2])
        right, top = (float(one) for one in np.max(spans, axis=0)[2:])
        shown = self._shown
        if shown and left >= shown[0] and bottom >= shown[1] and right <= shown[2] and top <= shown[3]:
            return
        self._right = right
        growth = HEADROOM if self._break_s is not None else GROWTH
        wide, tall = max(1e-9, right - left), max(1e-9, top - bottom)
        self._shown = (
            left - 0.02 * wide,
            bottom - 0.02 * tall,
            left + wide * growth,
            bottom + tall * (growth + 0.03),
        )
        self.plot.setXRange(self._shown[0], self._shown[2], padding=0)
        self.plot.setYRange(self._shown[1], self._shown[3], padding=0)

    def _until(self, row: int) -> tuple[Floats, Floats]:
        buffer, along = self.buffer, self.buffer.along()
        if self.kind is Kind.LOAD_TIME or along == TIME:
            place = LOAD if self.kind is Kind.LOAD_TIME else STRESS
            return buffer.column(TIME)[:row] - self._start_s, buffer.column(place)[:row]
        return 1e3 * buffer.column(along)[:row], buffer.column(STRESS)[:row]


def span_of(x: Floats, y: Floats) -> tuple[float, float, float, float] | None:
    """(left, bottom, right, top) of a curve with zero in it; x before the load has come counts only where all is so."""
    good = np.isfinite(x) & np.isfinite(y)
    if not good.any():
        return None
    x, y = x[good], y[good]
    loaded = y > LOADED_SHARE * y.max()
    along = x[loaded] if loaded.any() else x
    return min(0.0, float(along.min())), min(0.0, float(y.min())), float(along.max()), float(y.max())
