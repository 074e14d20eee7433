"""Keys of the operator's terminal: what was struck becomes a stop at once, or one deliberate key after a short quiet.

A gauge, scanner or paste sends many characters in quick succession: such a burst may stop the frame, never do
anything else. So a key counts only when nothing came shortly before it and nothing follows.
"""

from __future__ import annotations

import os
import queue
import select
import sys
import termios
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

STOP_KEYS = frozenset(" \x1b\x03")  # Space, Esc, Ctrl-C
LEAVE_KEYS = frozenset("\x03\x04")
QUIET_S = 0.05  # a person's fastest double strike is twice that; gauges send faster than 30 ms a character
GO_WINDOW_S = 2.0  # the O that confirms a movement must follow within this
MOVES = frozenset("GB")
GO = "O"
KEYS_WAITING_MAX = 64
LEAVE = "leave"  # no key: the terminal is gone, or Ctrl-C


@dataclass(slots=True)
class Strokes:
    """Judges characters by their times. Pure: time is an argument."""

    _held: str = ""
    _struck_s: float = float("-inf")
    _armed: str = ""
    _armed_s: float = float("-inf")

    def stops(self, struck: str) -> bool:
        """Whether anything in it means stop; forgets whatever was begun."""
        if not STOP_KEYS.intersection(struck):
            return False
        self._held = self._armed = ""
        return True

    def strike(self, struck: str, now_s: float) -> None:
        """Characters as they came. A burst throws away itself, what was held, and what was armed."""
        burst = len(struck) > 1 or now_s - self._struck_s < QUIET_S
        self._struck_s = now_s
        if burst:
            self._held = self._armed = ""
        else:
            self._held = struck

    def due(self, now_s: float) -> str:
        """The deliberate key, once it has stood alone long enough; "" while there is none.

        A movement is two keys: G or B arms, O within two seconds gives "GO" or "BO".
        """
        if not self._held or now_s - self._struck_s < QUIET_S:
            return ""
        key, self._held = self._held, ""
        armed, self._armed = self._armed, ""
        if key in MOVES:
            self._armed, self._armed_s = key, now_s
            return key
        if key == GO:
            return armed + GO if armed and now_s - self._armed_s < GO_WINDOW_S else ""
        return key

    @property
    def waiting(self) -> bool:
        return bool(self._held)


class Keyboard(threading.Thread):
    """Reads the terminal in a thread of its own, so that a stop never waits for drawing, feed or station."""

    def __init__(self, descriptor: int, stop: Callable[[str], str]) -> None:
        super().__init__(name="keyboard", daemon=True)
        self._descriptor = descriptor
        self._stop_frame = stop
        self._strokes = Strokes()
        self._over = threading.Event()
        self.keys: queue.Queue[str] = queue.Queue(KEYS_WAITING_MAX)
        self.stops: queue.Queue[str] = queue.Queue(
            KEYS_WAITING_MAX
        )  # empty: the bytes have left; else why not

    def run(self) -> None:
        while not self._over.is_set():
            wait_s = QUIET_S if self._strokes.waiting else 0.2
            if select.select([self._descriptor], [], [], wait_s)[0] and not self._read():
                return
            key = self._strokes.due(time.monotonic())
            if key:
                put(self.keys, key)

    def _read(self) -> bool:
        """False when the terminal is gone."""
        try:
            struck = os.read(self._descriptor, 1024).decode("latin-1")
        except OSError:
            struck = ""
        if self._strokes.stops(struck) or not struck:
            put(self.stops, self._stop_frame("operator's key" if struck else "operator's terminal gone"))
        else:
            self._strokes.strike(struck, time.monotonic())
        if not struck or LEAVE_KEYS.intersection(struck):
            put(self.keys, LEAVE)
        return bool(struck)

    def stop_and_leave(self) -> None:
        """For a signal handler: as if Ctrl-C had been struck."""
        put(self.stops, self._stop_frame("operator's terminal ends"))
        put(self.keys, LEAVE)

    def end(self) -> None:
        self._over.set()
        self.join(1.0)


def put(waiting: queue.Queue[str], item: str) -> None:
    """Never waits: what nobody takes is of no use any more."""
    try:
        waiting.put_nowait(item)
    except queue.Full:
        return


@contextmanager
def struck_keys() -> Iterator[int]:
    """Keys as they are struck, Ctrl-C, Ctrl-S and Ctrl-Z without their usual meaning; put back whatever happens."""
    descriptor = sys.stdin.fileno()
    before = termios.tcgetattr(descriptor)
    now = termios.tcgetattr(descriptor)
    now[0] &= ~(termios.IXON | termios.ICRNL)
    now[3] &= ~(termios.ICANON | termios.ECHO | termios.ISIG | termios.IEXTEN)
    try:
        termios.tcsetattr(descriptor, termios.TCSADRAIN, now)
        yield descriptor
    finally:
        try:
            termios.tcsetattr(descriptor, termios.TCSADRAIN, before)
        except termios.error:
            pass  # the terminal has gone
