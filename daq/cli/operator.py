"""The operator's terminal: keys in, requests out, the view kept current. Moves nothing itself; the bench decides."""

from __future__ import annotations

import queue
import signal
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.cli.keys import LEAVE, Keyboard
from daq.cli.session import Session
from daq.errors import MidspanError, Refused
from daq.station.client import Client
from daq.stream.updates import Update
from monitor.presenter import Presenter
from monitor.terminal import TerminalView
from monitor.wording import refusal_lines, sealed_lines

KEYS = """\
keys: m call the next bar (tare)      G O start (two keys within 2 s)
      Space, Esc STOP at any time     B O back off
      r reset   L reset: I have looked at the frame   C close this run
      1-9 note   ? these keys   q leave"""
HINTS = {"G": "G: strike O within 2 s to START", "B": "B: strike O within 2 s to BACK OFF"}
PUMP_S = 0.05
BACK_OFF_MM = 2.0  # common practice, no source: 1 to 2 mm
BACK_OFF_MM_MIN = 20.0
RETRY_SEAT_S = 2.0


@dataclass(slots=True)
class Seated:
    """A named person's claim on the seat and the series, good also after the station was started again."""

    client: Client
    name: str
    series: Path

    def open_series(self, *, sure: bool) -> list[str]:
        """Questions that must be answered first; empty once the series is open."""
        answer = self.client.do("series", path=str(self.series), sure=sure)
        return list(answer["questions"])

    def again(self) -> None:
        self.client.sit(self.name)
        self.client.do("series", path=str(self.series), sure=True)

    def rise(self) -> str:
        """Free the seat; says in a line whether that went well."""
        try:
            self.client.rise()
        except MidspanError as error:
            return f"the seat could not be freed: {error}"
        return "the seat is free"


class OperatorTerminal:
    """Single deliberate keys come from the keyboard's thread, which has obeyed every stop already."""

    def __init__(self, seated: Seated, keyboard: Keyboard, view: TerminalView) -> None:
        self._seated = seated
        self._client = seated.client
        self._keyboard = keyboard
        self._view = view
        self._presenter = Presenter()
        self._presenter.take_look(self._client.look(), time.monotonic())
        self._session = Session(self._client, self._on_update)
        self._moving = False
        self._leave = False
        self._seat_s = time.monotonic()

    def leave_now(self) -> None:
        """A signal asks us to go: the frame is stopped first, as with Ctrl-C."""
        self._keyboard.stop_and_leave()

    def loop(self) -> None:
        self._view.say(KEYS)
        while not self._leave:
            self._session.pump(PUMP_S)
            self._tell_stops()
            self._take_keys()
            self._presenter.lost_updates = self._client.lost_updates
            now_s = time.monotonic()
            if self._view.due(now_s):
                self._view.show(self._presenter.lines(now_s), now_s)

    def _on_update(self, update: Update | None) -> None:
        if update is None:
            return
        self._presenter.take(update, time.monotonic())
        if update.kind == "result":
            self._view.say("\n".join(sealed_lines(update.body)))
        elif update.kind == "summary":
            self._moving = bool(update.body.get("moving") or update.body.get("armed"))
        elif update.kind == "state" and not update.body.get("operator"):
            self._sit_again()

    def _sit_again(self) -> None:
        """The station has been started again and knows nobody; the frame was stopped by the bench."""
        if time.monotonic() - self._seat_s < RETRY_SEAT_S:
            return
        self._seat_s = time.monotonic()
        try:
            self._seated.again()
            self._view.say("the station was started again: seat and series taken again")
        except MidspanError as error:
            self._view.say(str(error))

    # --- keys
    def _tell_stops(self) -> None:
        for why in waiting(self._keyboard.stops):
            self._view.say(f"NO STOP: {why} - USE THE EMERGENCY STOP AT THE MACHINE" if why else "STOP sent")

    def _take_keys(self) -> None:
        for key in waiting(self._keyboard.keys):
            try:
                self._obey(key)
            except Refused as error:
                self._view.say("\n".join(refusal_lines(error.command, error.missing)))
            except MidspanError as error:
                self._view.say(str(error))

    def _obey(self, key: str) -> None:
        if key == LEAVE:
            self._leave = True
        elif key == "q":
            moving = self._moving and self._presenter.is_current(time.monotonic())
            self._leave = not moving
            if moving:
                self._view.say("the frame is moving: Space stops it, then q leaves")
        elif key == "?":
            self._view.say(KEYS)
        elif key in HINTS:
            self._view.say(HINTS[key])
        elif key in "123456789":
            self._client.do("note", text=f"operator's mark {key}")
            self._view.say(f"note {key} is in the stream")
        elif key in REQUESTS:
            name, fields = REQUESTS[key]
            self._client.do(name, **fields)


REQUESTS: Mapping[str, tuple[str, Mapping[str, Any]]] = {
    "m": ("mount", {}),
    "r": ("reset", {}),
    "L": ("reset", {"looked": True}),
    "C": ("close", {"reason": "closed by the operator"}),
    "GO": ("start", {}),
    "BO": ("return", {"distance_mm": BACK_OFF_MM, "speed_mm_min": BACK_OFF_MM_MIN}),
}


def waiting(items: queue.Queue[str]) -> Iterator[str]:
    """What lies in a queue now."""
    while True:
        try:
            yield items.get_nowait()
        except queue.Empty:
            return


@contextmanager
def signals_to(leave: Callable[[], None]) -> Iterator[None]:
    """A closed terminal window or a polite kill ends the session in order."""
    kinds = (signal.SIGHUP, signal.SIGTERM)
    before = [signal.signal(kind, lambda *_: leave()) for kind in kinds]
    try:
        yield
    finally:
        for kind, handler in zip(kinds, before, strict=True):
            signal.signal(kind, handler)
