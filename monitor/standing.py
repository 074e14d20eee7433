"""Whether the crosshead still stands where the last loading left it: then the next bar has no way to go. Pure."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

BACKED_OFF_MM_MIN = 1.0  # common practice, no source: 1 to 2 mm; less is settling, not a way back


class Standing:
    """Told the events and positions of the stream; a move away by command, by itself or by hand ends it."""

    def __init__(self) -> None:
        self.is_down = False
        self._left_mm: float | None = None

    def take_event(self, event: Mapping[str, Any]) -> None:
        """`started` sends it to the bar, `returned` away from it; another loading begins its own count."""
        name = event.get("event")
        if name in ("started", "returned"):
            self.is_down, self._left_mm = name == "started", None

    def take_position(self, towards_mm: float | None) -> None:
        """At rest after a loading: mm, growing towards the bar. The first one is where the loading left it."""
        if not self.is_down or towards_mm is None:
            return
        if self._left_mm is None or towards_mm > self._left_mm:
            self._left_mm = towards_mm
        elif self._left_mm - towards_mm >= BACKED_OFF_MM_MIN:
            self.is_down, self._left_mm = False, None
