"""Tones: which moments are heard, and how often. Pure. Each has its visible twin; off unless asked for.

seated: one; caution: two; break: three, quick; a stop or fault: one every two seconds until a person has reset it.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from monitor.presenter import Tone

SEATED, CAUTION, BREAK = 1, 2, 3
FAULT_EVERY_S = 2.0


class Tones:
    """Feed it events and the tone of the state; it says how many beeps are due."""

    def __init__(self) -> None:
        self._fault_s = float("-inf")

    def of_event(self, event: Mapping[str, Any]) -> int:
        """Beeps of one event."""
        name = event.get("event")
        if name == "fracture":
            return BREAK
        if event.get("severity") == "caution":
            return CAUTION
        return SEATED if name == "seated" else 0

    def of_state(self, tone: Tone, now_s: float) -> int:
        """The fault's beep, where it is due."""
        if tone is not Tone.STOP:
            self._fault_s = float("-inf")
            return 0
        if now_s - self._fault_s < FAULT_EVERY_S:
            return 0
        self._fault_s = now_s
        return 1
