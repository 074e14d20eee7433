"""The operator's orders: keys to requests, answers to words, the seat, the look. The bench decides what is obeyed."""

from __future__ import annotations

import time
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from daq.errors import MidspanError
from monitor.errands import Answer, Desk
from monitor.notebook import Notebook
from monitor.presenter import Tone
from monitor.sheet import Sheet
from monitor.wording import refusal_lines

if TYPE_CHECKING:
    from monitor.window import Outside, Window

BACK_OFF_MM = 2.0  # common practice, no source: 1 to 2 mm
BACK_OFF_MM_MIN = 20.0
SEAT_AGAIN_S = 2.0
REQUESTS: Mapping[str, tuple[str, Mapping[str, Any]]] = {
    "m": ("mount", {}),
    "r": ("reset", {}),
    "L": ("reset", {"looked": True}),
    "C": ("close", {"reason": "closed by the operator"}),
    "start": ("start", {}),
    "return": ("return", {"distance_mm": BACK_OFF_MM, "speed_mm_min": BACK_OFF_MM_MIN}),
}
BROKEN = "this window carries no commands any more: close it, open it again; midspan stop works meanwhile"
QUESTION = "Is all of this as it should be? y: yes, open the series. "
WATCHING = (
    "watching only: this window can stop the frame, never move it; the operator's window has --operator"
)


class Orders:
    """One window's orders."""

    def __init__(self, window: Window, outside: Outside) -> None:
        self._window, self._outside = window, outside
        self._seated_s = float("-inf")
        self.notebook = Notebook(window, outside)
        self._questions: tuple[str, ...] = ()
        self._sheet: Sheet | None = None
        self._begun = False

    def begin(self) -> None:
        self._begun = True
        self.look()
        if self._outside.operator:
            self.sit(instead=self._outside.instead)

    def end(self) -> None:
        if self._outside.operator:
            self._window.errands.do("rise")

    def stop(self, who: str) -> None:
        """On key-down, before anything else is done or shown."""
        self._window.stop_line.stop(who)

    # --- one turn
    def turn(self, now_s: float) -> None:
        """Keys that have become due, and answers that have come."""
        key = self._window.judge.due(now_s)
        if key:
            self.obey(key)
        for why in self._window.stop_line.answers():
            if why:
                self._window.tell(f"NO STOP: {why} - USE THE EMERGENCY STOP AT THE MACHINE", Tone.STOP, 60.0)
            else:
                self._window.tell("STOP sent", Tone.STOP, 2.0)
        for answer in self._window.errands.answers():
            self._hear(answer)
        if self._begun and not (self._window.errands.is_alive() and self._window.stop_line.is_alive()):
            self._window.tell(BROKEN, Tone.STOP)
        self.notebook.turn()
        presenter = self._window.scene.presenter
        nobody = presenter.frame and not presenter.state_body.get("operator")
        if self._outside.operator and nobody and now_s - self._seated_s > SEAT_AGAIN_S:
            self.sit()  # the station was started again and knows nobody

    def obey(self, key: str) -> None:
        """One deliberate key."""
        window = self._window
        plain = {
            "?": window.toggle_keys,
            "s": window.swap_chief,
            "t": window.trace.turn,
            "d": window.swap_theme,
            "q": self._leave,
            "n": self.notebook.open,
            "e": self._open_sheet,
            "y": self._confirm,
        }
        if key in plain:
            plain[key]()
        elif key in REQUESTS or key in "123456789":
            self._request(key)

    def _request(self, key: str) -> None:
        if not self._outside.operator:
            self._window.tell(WATCHING, Tone.PLAIN, 4.0)
            return
        if key in REQUESTS:
            name, fields = REQUESTS[key]
            self._ask(name, fields)
        else:
            self._ask("note", {"text": f"operator's mark {key}"})

    def _ask(self, name: str, fields: Mapping[str, Any]) -> None:
        if not self._window.errands.do(name, **fields):
            self._window.tell("the station has not answered yet; wait a moment")

    # --- bench sheet
    def _open_sheet(self) -> None:
        """The page of the bench sheet, at the next bar."""
        outside, window = self._outside, self._window
        if outside.open_sheet is None or outside.series is None:
            window.tell("no bench sheet here: open the window with --operator and --series", Tone.PLAIN, 4.0)
            return
        sitting = window.scene.sitting or {}
        broken = {str(bar["number"]) for bar in sitting.get("bars", ()) if bar["state"] == "broken"}
        try:
            self._sheet = outside.open_sheet(outside.series)
            window.pages.setCurrentWidget(window.sheet_form)
            window.sheet_form.open_for(self._sheet, broken, str(sitting.get("next") or ""))
        except (MidspanError, OSError) as error:
            window.leave_page()
            window.tell(str(error).replace("\n", "; "))

    def keep_bar(self, number: str) -> None:
        """Write a bar down, away from the window's own thread."""
        sheet, cells = self._sheet, self._window.sheet_form.values()
        assert sheet is not None

        def work(desk: Desk) -> Mapping[str, Any]:
            del desk
            try:
                sheet.write(cells)
            except OSError as error:
                raise MidspanError(f"the bench sheet cannot be written: {error}") from error
            return {"number": number}

        self._window.reader.ask("sheet", work)

    def hear_sheet(self, answer: Answer) -> None:
        """Kept, and then the station reads the sheet again; or why not."""
        form = self._window.sheet_form
        if not answer.good:
            form.say("not kept: " + ("; ".join(answer.missing) or answer.trouble).replace("\n", "; "))
            return
        form.next_after(str(answer.body["number"]))
        sitting, series = self._window.scene.sitting, self._outside.series
        self._ask("series", {"path": str(series), "sure": bool(sitting)})

    def _leave(self) -> None:
        if self._outside.operator and self._window.scene.presenter.moving:
            self._window.tell("the frame is moving: Space stops it, then q leaves")
            return
        self._window.close()

    # --- seat, series, look
    def sit(self, *, instead: bool = False, sure: bool = False) -> None:
        """Take the seat and open the series."""
        self._seated_s = time.monotonic()
        name, series = self._outside.operator, self._outside.series

        def work(desk: Desk) -> Mapping[str, Any]:
            desk.sit(name, instead=instead)
            return desk.do("series", path=str(series), sure=sure) if series is not None else {}

        self._window.errands.ask("sit", work)

    def _confirm(self) -> None:
        """The questions about cards and bench sheet have been looked at."""
        if self._questions:
            self._questions = ()
            self._window.be_quiet()
            self.sit(instead=True, sure=True)

    def look(self) -> None:
        self._window.errands.ask("look", lambda desk: desk.look())

    def _hear(self, answer: Answer) -> None:
        if answer.name == "look" and answer.good:
            self._window.take_look(answer.body)
        elif answer.name == "look":
            self._window.scene.wants_look = True  # once more, in a second
            return  # the foot and the state say how old everything is
        elif not answer.good:
            self._refused(answer)
        elif answer.name in ("sit", "series"):
            self.look()
            self._questions = tuple(answer.body.get("questions") or ())
            if self._questions:
                self._window.tell(QUESTION + "; ".join(self._questions), Tone.CAUTION, 600.0)
        else:
            self._window.be_quiet()
            self._window.scene.wants_look |= answer.name == "mount"

    def _refused(self, answer: Answer) -> None:
        if answer.trouble:
            self._window.tell(answer.trouble, Tone.STOP)
        else:
            self._window.tell("  ".join(refusal_lines(answer.name, answer.missing)))
