"""Copier: verified second copies of sealed records, made by one thread so that a share that hangs holds up
nobody.

Owed copies are kept by the caller (in the mark), not here: after a restart they are simply asked for again.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from daq.errors import MidspanError
from daq.record.publish import copy_verified, sha256_of

RETRY_S = 30.0


@dataclass(frozen=True, slots=True)
class Copied:
    """One attempt. trouble: why there is no copy; empty where there is one."""

    name: str
    target: Path
    trouble: str = ""


class Copier:
    """Copies records, named relative to the out folder, to the same place below another folder."""

    def __init__(self, out_folder: Path, copy_to: Path) -> None:
        self._out = out_folder
        self._to = copy_to
        self._thread: threading.Thread | None = None
        self._done: deque[Copied] = deque()
        self._next_s = float("-inf")

    def advance(self, owed: Sequence[str], now_s: float) -> list[Copied]:
        """What has come to an end since the last call; begins the next attempt where one is due."""
        done = self.take()
        left = [name for name in owed if name not in {copied.name for copied in done}]
        if any(copied.trouble for copied in done):
            self._next_s = now_s + RETRY_S
        elif left and not self.busy and now_s >= self._next_s:
            self._thread = threading.Thread(target=self._copy, args=(left,), daemon=True)
            self._thread.start()
        return done

    def take(self) -> list[Copied]:
        """The attempts that have come to an end; begins nothing."""
        return [self._done.popleft() for _ in range(len(self._done))]

    @property
    def busy(self) -> bool:
        return self._thread is not None and self._thread.is_alive()

    def wait(self, limit_s: float) -> None:
        """Let an attempt under way come to its end, at most that long."""
        if self._thread is not None:
            self._thread.join(limit_s)

    def _copy(self, names: Sequence[str]) -> None:
        for name in names:
            self._done.append(self._copy_one(name))
            if self._done[-1].trouble:
                return  # the folder is away: the others would fail alike

    def _copy_one(self, name: str) -> Copied:
        source, target = self._out / name, self._to / name
        try:
            if not self._to.is_dir():
                return Copied(name, target, f"folder {self._to} is not there")
            copy_verified(source, target, sha256_of(source))
        except (OSError, MidspanError) as error:
            return Copied(name, target, str(error))
        return Copied(name, target)
