"""Keys of the window: what was struck becomes a stop at once, a deliberate command after a short quiet, or a start that
is held. Pure: time is an argument.

A gauge or scanner is a keyboard that types faster than any hand. What it sends may stop the frame (a space may), and
may fill a field; it is never a command, and nothing it sends can be held for 0.3 s.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import Enum

HOLD_S = 0.3
BURST_S = 0.03  # a device types faster than this from key to key
QUIET_S = 0.05  # that a single key must stand alone, before and after
DEBOUNCE_S = 0.05  # of a pedal's contact
STOP_KEYS = frozenset({"Escape", "Space"})
HOLDS = {"g": "start", "b": "return"}
ENTERS = frozenset({"Return", "Enter"})


class Deed(Enum):
    """What a key came to."""

    STOP = "stop"
    TYPE = "type"  # belongs to the field that has the focus
    LEAVE = "leave"  # the field or page that is open
    NOTHING = "nothing"


@dataclass(slots=True)
class KeyJudge:
    """Judges key-down and key-up by name and time. Names: one letter as typed, or Qt's name ("Escape", "F9").

    pedal_stop, pedal_start: keys a pedal sends, if one is fitted.
    """

    pedal_stop: str = ""
    pedal_start: str = ""
    _struck_s: float = float("-inf")
    _waiting: str = ""
    _held: str = ""
    _held_s: float = 0.0
    _released_s: dict[str, float] = field(default_factory=dict)
    _done: bool = False

    def down(self, key: str, now_s: float, *, repeat: bool, typing: bool, at_rest: bool) -> Deed:
        """at_rest: the frame is proven to stand and to be free to type at. typing: a text field has the focus."""
        if self.is_stop(key):
            self.forget()
            if typing and at_rest and key != self.pedal_stop:
                return Deed.TYPE if key == "Space" else Deed.LEAVE
            return Deed.NOTHING if repeat else Deed.STOP
        if repeat:
            return Deed.TYPE if typing else Deed.NOTHING
        bounced = now_s - self._released_s.get(key, float("-inf")) < DEBOUNCE_S and key == self.pedal_start
        burst = now_s - self._struck_s < QUIET_S
        self._struck_s = now_s
        self._waiting = self._held = ""
        if typing:
            return Deed.TYPE
        if burst or bounced or key in ENTERS:
            return Deed.NOTHING
        if key in HOLDS or (key and key == self.pedal_start):
            self._held, self._held_s, self._done = key, now_s, False
        else:
            self._waiting = key
        return Deed.NOTHING

    def up(self, key: str, now_s: float, *, repeat: bool) -> None:
        """Letting go early is no start."""
        if repeat:
            return
        self._released_s[key] = now_s
        if len(self._released_s) > 64:
            self._released_s.clear()
        if key == self._held:
            self._held = ""

    def forget(self) -> None:
        """The window lost the focus, or a stop came: whatever was begun is off."""
        self._waiting = self._held = ""

    def due(self, now_s: float) -> str:
        """A command that has become due: a letter that stood alone, or "start" or "return" that was held; else ""."""
        if self._waiting and now_s - self._struck_s >= QUIET_S:
            key, self._waiting = self._waiting, ""
            return key
        if self._held and not self._done and now_s - self._held_s >= HOLD_S:
            self._done = True
            return "start" if self._held == self.pedal_start else HOLDS[self._held]
        return ""

    def hold_share(self, now_s: float) -> float:
        """How much of the hold has passed, 0 to 1, to be shown while it lasts."""
        if not self._held or self._done:
            return 0.0
        return min(1.0, max(0.0, (now_s - self._held_s) / HOLD_S))

    def is_stop(self, key: str) -> bool:
        return key in STOP_KEYS or (bool(key) and key == self.pedal_stop)
