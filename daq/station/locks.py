"""Locks: a wrong sign and an overload, as the watch tells of them, written where a restart finds them.

Heard twice, by the event and by the snapshot, so that neither a restarted station nor a lost entry forgets one. Writing
is tried again at every beat; until it has worked, what could not be written counts all the same.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from daq.cards.frame import FrameCard
from daq.station.proofs import POLARITY, free_cell, lock_cell, read_proofs, void_polarity

CHECKED_KEYS = ("who", "weight_n", "found_n")


class Locks:
    """The file of proofs as one running daemon sees it. tell: a line for people."""

    def __init__(self, path: Path, frame: FrameCard, stream_id: int, tell: Callable[[str], None]) -> None:
        self._path, self._frame, self._stream_id, self._tell = path, frame, stream_id, tell
        self._seen: dict[str, float] = {}  # lock -> stream time of the newest one
        self._written: dict[str, float] = {}

    def notice(self, event: Mapping[str, Any]) -> None:
        """An event of the stream."""
        name = event["event"]
        if name == "polarity_locked":
            self._hear(POLARITY, float(event["time_s"]))
        elif name == "cell_locked":
            self._hear("cell", float(event["time_s"]))
        elif name == "cell_checked":
            free_cell(self._path, {key: event[key] for key in CHECKED_KEYS})

    def beat(self, snapshot: Mapping[str, Any]) -> None:
        """The watch's present values. A cell that was locked when the daemon started is locked in the file already."""
        self._hear(POLARITY, snapshot.get("polarity_locked_s"))
        self._hear("cell", snapshot.get("cell_locked_s") or None)

    def proofs(self) -> dict[str, bool]:
        """What the file says, less what could not be written there yet."""
        proven = read_proofs(self._path, self._frame)
        waiting = {kind for kind, at_s in self._seen.items() if self._written.get(kind) != at_s}
        return {kind: done and kind not in waiting for kind, done in proven.items()}

    def _hear(self, kind: str, locked_s: float | None) -> None:
        if locked_s is None or locked_s == self._written.get(kind):
            return
        first = self._seen.get(kind) != locked_s
        self._seen[kind] = locked_s
        try:
            if kind == POLARITY:
                void_polarity(self._path, self._stream_id, locked_s)
            else:
                lock_cell(self._path, self._frame, self._stream_id, locked_s)
        except OSError as error:
            if first:
                self._tell(f"{self._path}: the lock of the {kind} could not be written ({error})")
            return
        self._written[kind] = locked_s
