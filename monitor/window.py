"""The operator's window: the bar is the instrument. At the top the bar in its fixture, below it the trace.

It is a client of the feed like any other; if it hangs or dies nothing changes at the bench. Its only way to the machine
is the stop line; commands go to the station, which obeys whoever holds the operator's seat.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from PySide6.QtCore import QEvent, QTimer, Signal
from PySide6.QtGui import QCloseEvent, QPalette, QResizeEvent, QScreen
from PySide6.QtWidgets import QApplication, QHBoxLayout, QStackedWidget, QVBoxLayout, QWidget

from daq.stream.updates import Update
from monitor.bands import Foot, Gauge, Headline, Told
from monitor.board import Board, board_of
from monitor.columns import columns_of
from monitor.drawing import Drawing
from monitor.errands import Desk, Errands, Feed, StopLine, no_desk
from monitor.inset import Inset
from monitor.keyfilter import KeyFilter
from monitor.keys import KeyJudge
from monitor.notes import NoteForm, Notes
from monitor.orders import Orders
from monitor.pages import KeysPage
from monitor.palette import DARK, THEMES, Theme
from monitor.presenter import Line, Tone
from monitor.scene import Scene
from monitor.setting import Setting
from monitor.sheet import Sheet, SheetForm
from monitor.side import Side
from monitor.sizes import Sizes, sizes_for
from monitor.strip import Strip, cells_of
from monitor.tones import Tones
from monitor.traceplot import TracePlot

BEEP_MS = 180
TURN_MS = 33  # 30 redraws a second
NUMBERS_EVERY_S = 0.2  # trade judgement, no source: numbers change four to five times a second
POSE_EVERY_S = 0.1
LOOK_EVERY_S = 1.0
FAREWELL_S = 1.0  # for the seat to be freed and a note to be kept
TOLD_S = 8.0  # how long a refusal stays
PLAIN = Setting()


@dataclass(frozen=True, slots=True)
class Outside:
    """What the window needs of the world; the command line puts it together.

    open_desk None: watch only, nothing can be asked for. figures: strengths in MPa -> what is said of the series.
    """

    feed: Feed
    stop: Callable[[str], str]
    open_desk: Callable[[], AbstractContextManager[Desk]]
    figures: Callable[[Sequence[float]], str]
    operator: str = ""
    series: Path | None = None
    instead: bool = False
    notes: Notes | None = None
    open_sheet: Callable[[Path], Sheet] | None = None


class Window(QWidget):
    """Show it, and call `begin` once."""

    closed = Signal()

    def __init__(self, outside: Outside, setting: Setting = PLAIN) -> None:
        super().__init__()
        self.setWindowTitle("midspan watch")
        self.scene = Scene(verdict_first=setting.verdict_first)
        self.theme: Theme = THEMES.get(setting.theme, DARK)
        self._outside, self._setting = outside, setting
        self.stress_first = setting.stress_first
        self.tones = Tones()
        self.judge = KeyJudge(setting.pedal_stop, setting.pedal_start)
        self.stop_line = StopLine(outside.stop)
        self.errands = Errands(outside.open_desk)
        self.reader = Errands(no_desk)  # what is read and kept on disk; no command waits behind it
        self.orders = self.make_orders(outside)
        self._build()
        self.filter = KeyFilter(
            self.judge, stop=self.orders.stop, leave=self.leave_page, at_rest=self.is_at_rest
        )
        self._timer = QTimer(self)
        self._timer.timeout.connect(self.turn)
        self._numbers_s = self._look_s = self._posed_s = float("-inf")
        self._told: Line | None = None
        self._told_until_s = 0.0
        self._inset_run = ""
        self.lost_before = 0

    def make_orders(self, outside: Outside) -> Orders:
        """What keys are for; a record that is played has others."""
        return Orders(self, outside)

    def make_keys_page(self) -> KeysPage:
        return KeysPage()

    def _build(self) -> None:
        self.headline, self.gauge, self.told, self.foot = Headline(), Gauge(), Told(), Foot()
        self.drawing, self.strip = Drawing(), Strip()
        self.trace, self.side, self.inset = TracePlot(), Side(), Inset()
        self.keys_page = self.make_keys_page()
        self.column = QStackedWidget()
        self.column.addWidget(self.side)
        self.note_form = NoteForm()
        self.column.addWidget(self.note_form)
        running = QWidget()
        across = QHBoxLayout(running)
        across.setContentsMargins(0, 0, 0, 0)
        across.setSpacing(4)
        across.addWidget(self.trace, 46)
        across.addWidget(self.inset, 24)
        self.inset.hide()
        across.addWidget(self.column, 30)
        self.pages = QStackedWidget()
        for stack in (self.pages, self.column):
            stack.setMinimumSize(10, 10)  # a form never takes room from the drawing
        self.pages.addWidget(running)
        self.pages.addWidget(self.keys_page)
        self.sheet_form = SheetForm()
        self.pages.addWidget(self.sheet_form)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(3)
        layout.addWidget(self.headline)
        layout.addWidget(self.drawing, 48)
        layout.addWidget(self.gauge)
        layout.addWidget(self.pages, 52)
        layout.addWidget(self.strip)
        layout.addWidget(self.told)
        layout.addWidget(self.foot)
        self.drawing.marked.connect(self.orders.notebook.mark)
        self.sheet_form.kept.connect(self.orders.keep_bar)
        self.note_form.changed.connect(self.orders.notebook.typed)
        self.note_form.filled.connect(self.orders.notebook.filled)
        self.dress()

    # --- life
    def begin(self) -> None:
        """Start listening."""
        application = QApplication.instance()
        assert application is not None
        application.installEventFilter(self.filter)
        self.stop_line.start()
        self.errands.start()
        self.reader.start()
        self.orders.begin()
        self._timer.start(TURN_MS)

    def closeEvent(self, event: QCloseEvent) -> None:
        """A window that is closed while the frame moves stops it, as a terminal that goes away does."""
        if self._outside.operator and self.scene.presenter.moving:
            self._outside.stop("operator's window closed")  # not by its thread: the process may end first
        self._timer.stop()
        application = QApplication.instance()
        if application is not None:
            application.removeEventFilter(self.filter)
        self.orders.end()
        for thread in (self.errands, self.reader):
            thread.end()
            if thread.is_alive():
                thread.join(FAREWELL_S)
        self.closed.emit()
        super().closeEvent(event)

    def is_at_rest(self) -> bool:
        return self.scene.presenter.is_proven_at_rest(time.monotonic())

    # --- one turn
    def turn(self) -> None:
        """Take what has come, obey keys, show."""
        now_s = time.monotonic()
        for update in self._outside.feed.updates(0.0):
            self.take(update, now_s)
        self.scene.presenter.lost_updates = self._outside.feed.lost_updates
        self.orders.turn(now_s)
        if self.scene.wants_look and now_s - self._look_s > LOOK_EVERY_S:
            self._look_s = now_s
            self.orders.look()
        self.show_now(now_s)

    def take(self, update: Update, now_s: float) -> None:
        """One update into scene and trace."""
        if self.scene.take(update, now_s):
            self.trace.begin(keep_as_ghost=self.trace.break_s is not None)
            self.inset.hide()
        if update.kind == "trace" and update.body.get("run_id") in (self.scene.run_id, ""):
            if self.scene.ending.closed is None:
                self.trace.take(update.columns)
        elif update.kind == "summary":
            self.trace.take_rate(update.body.get("time_s"), update.body.get("stress_rate_mpa_s"))
        elif update.kind == "event":
            self.trace.take_event(update.body)
            self.sound(self.tones.of_event(update.body))

    def take_look(self, look: Mapping[str, Any]) -> None:
        """Everything at once: at the start, and after the station was away."""
        before = self.scene.run_id
        self.scene.take_look(look, time.monotonic())
        if self.scene.run_id != before or not len(self.trace.buffer):
            self.trace.begin(keep_as_ghost=self.trace.break_s is not None)
            self.trace.take(look.get("columns") or columns_of(look.get("trace") or {}))
            for event in look.get("events") or ():
                self.trace.take_event(event)
        self.orders.notebook.read(self.scene.sitting)

    def show_now(self, now_s: float) -> None:
        """Trace at every turn, numbers when they are due."""
        presenter = self.scene.presenter
        self.trace.age(current=presenter.is_current(now_s) or self.scene.ending.is_over)
        self.trace.redraw()
        if now_s - self._posed_s >= POSE_EVERY_S:
            self._posed_s = now_s
            self.pose()
        if now_s - self._numbers_s >= NUMBERS_EVERY_S:
            self._numbers_s = now_s
            board = board_of(presenter, now_s)
            self.show_numbers(board)
            self.sound(self.tones.of_state(board.tone, now_s))
        self._show_told(now_s)

    def sound(self, beeps: int) -> None:
        """One after the other, where tones were asked for."""
        for beep in range(beeps if self._setting.tones else 0):
            QTimer.singleShot(beep * BEEP_MS, QApplication.beep)

    def pose(self) -> None:
        """The bar as it stands now."""
        may_mark = self.orders.notebook.is_kept
        self.drawing.pose(self.scene.posture(stress_first=self.stress_first, may_mark=may_mark))

    def show_numbers(self, board: Board) -> None:
        """Everything that changes a few times a second."""
        scene = self.scene
        for band in (self.headline, self.gauge, self.drawing, self.strip, self.told, self.foot):
            band.show_board(board)
        self.drawing.fit(scene.beam, scene.beam_note)
        ending = scene.ending.lines()
        facts = (Line("gross load", board.gross), *board.facts)
        rows = ending or [fact for fact in facts if fact.text != "-"]
        self.side.say(rows, chief=bool(ending), faint=not (ending or board.believed))
        self.strip.say(
            cells_of(scene.sitting, self.orders.notebook.verdicts, hide=scene.unjudged()),
            self.orders.notebook.figures(),
        )
        self.foot.say(board.mark, self._foot_words(board))
        self._show_break()

    def _show_told(self, now_s: float) -> None:
        hold = self.judge.hold_share(now_s)
        line = self.headline.board and self.headline.board.told
        if self._told is not None and now_s < self._told_until_s:
            line = self._told
        self.told.say(line or Line("do now", ""), round(hold, 2), "hold on ..." if hold else "")

    def _show_break(self) -> None:
        """Once the tail is in: the half second around the break at full rate."""
        ending, at_s = self.scene.ending, self.trace.break_s
        if at_s is None or (self._inset_run == self.scene.run_id and self.inset.isVisible()):
            return
        times = self.trace.buffer.column(0)
        if ending.closed is not None or (len(times) and float(times[-1]) > at_s + 0.26):
            self._inset_run = self.scene.run_id
            self.inset.show_break(self.trace.buffer, at_s)
            self.inset.show()

    def _foot_words(self, board: Board) -> tuple[Line, ...]:
        seat = Line(
            "seat", f"operator {self._outside.operator}" if self._outside.operator else "watching only"
        )
        heard = self.isActiveWindow() or QApplication.activeModalWidget() is not None
        keys = (
            Line("keys", "? keys")
            if heard
            else Line("keys", "KEYS NOT HEARD HERE: click this window", Tone.CAUTION)
        )
        frame = Line("frame", board.frame)
        data = Line("data", f"data {board.data.text}" if board.data.text else "no data", board.data.tone)
        far = Line("size", f"letters for {self.sizes.distance_m:.1f} m")
        return (frame, data, seat, keys, Line("trace", self.trace.kind.value), far)

    # --- said and asked
    def tell(self, text: str, tone: Tone = Tone.CAUTION, seconds: float = TOLD_S) -> None:
        """A refusal or an answer in the one line, for a while."""
        self._told, self._told_until_s = Line("told", text, tone), time.monotonic() + seconds

    def be_quiet(self) -> None:
        self._told = None

    def leave_page(self) -> None:
        """Back to the running view; a field that was open loses the focus."""
        self.pages.setCurrentIndex(0)
        self.column.setCurrentIndex(0)
        self.setFocus()

    def toggle_keys(self) -> None:
        shown = self.pages.currentWidget() is self.keys_page
        self.pages.setCurrentIndex(0) if shown else self.pages.setCurrentWidget(self.keys_page)

    # --- looks
    @property
    def pixel_mm(self) -> float:
        """Of the real screen; a density that cannot be true is replaced by the usual one."""
        if self._setting.pixel_mm is not None:
            return self._setting.pixel_mm
        screen = self.screen()
        return pixel_mm_of(screen) if screen is not None else 0.0

    @property
    def sizes(self) -> Sizes:
        return sizes_for(self.height(), self.pixel_mm)

    def swap_theme(self) -> None:
        names = list(THEMES)
        self.theme = THEMES[names[(names.index(self.theme.name) + 1) % len(names)]]
        self.dress()

    def swap_chief(self) -> None:
        self.stress_first = not self.stress_first

    def dress(self) -> None:
        """Colours and sizes everywhere."""
        palette = self.palette()
        palette.setColor(QPalette.ColorRole.Window, self.theme.ground)
        self.setPalette(palette)
        self.setAutoFillBackground(True)
        sizes = self.sizes
        self.drawing.sizes = sizes
        for widget in (self.headline, self.gauge, self.told, self.foot, self.strip, self.drawing):
            widget.dress(self.theme, sizes)
        for panel in (self.trace, self.side, self.inset, self.keys_page, self.note_form, self.sheet_form):
            panel.dress(self.theme, sizes)

    def resizeEvent(self, event: QResizeEvent) -> None:
        self.dress()
        super().resizeEvent(event)

    def changeEvent(self, event: QEvent) -> None:
        """Keys are heard only in the active window: a hold that was begun elsewhere is off."""
        if event.type() == QEvent.Type.ActivationChange and not self.isActiveWindow():
            self.judge.forget()
        super().changeEvent(event)


def pixel_mm_of(screen: QScreen) -> float:
    """Height of one logical pixel on the glass, from what the screen says of itself."""
    high_mm, high_px = screen.physicalSize().height(), screen.size().height()
    return high_mm / high_px if high_px > 0 else 0.0
