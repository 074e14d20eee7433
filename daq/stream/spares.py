"""Spares: files of zeros that wait to become segments, so that a full disk is met before a run, not in it."""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from daq.stream.files import Files
from daq.stream.segments import BODY_OFFSET, SPARE_PREFIX


@dataclass(frozen=True, slots=True)
class Spare:
    """One file of zeros, synced, under a name that no reader looks at."""

    path: Path
    handle: int
    size_bytes: int


class Spares:
    """The stock of them."""

    def __init__(self, folder: Path, size_bytes: int, files: Files) -> None:
        self._folder = folder
        self._files = files
        self._stock: list[Spare] = []
        self._made = 0
        self.size_bytes = size_bytes

    def __len__(self) -> int:
        return len(self._stock)

    @property
    def free_bytes(self) -> int:
        """Room for batches in all of them."""
        return sum(spare.size_bytes - BODY_OFFSET for spare in self._stock)

    def add(self) -> None:
        """One more of the usual size."""
        self._stock.append(self._make(self.size_bytes))

    def take(self, size_bytes: int) -> Spare:
        """One of at least that size, made now where none is in stock."""
        fitting = next((spare for spare in self._stock if spare.size_bytes >= size_bytes), None)
        if fitting is None:
            return self._make(max(size_bytes, self.size_bytes))
        self._stock.remove(fitting)
        return fitting

    def discard(self, spare: Spare) -> None:
        """Give up one that could not be used; its room comes back where the file system still obeys."""
        with suppress(OSError):
            self._files.close(spare.handle)
        with suppress(OSError):
            self._files.remove(spare.path)

    def clear(self) -> None:
        """Remove every one, those of an earlier life included: their content is not vouched for."""
        for spare in self._stock:
            self.discard(spare)
        self._stock.clear()
        for name in self._files.names(self._folder):
            if name.startswith(SPARE_PREFIX):
                self._files.remove(self._folder / name)

    def _make(self, size_bytes: int) -> Spare:
        self._made += 1
        path = self._folder / f"{SPARE_PREFIX}{self._made:08d}"
        spare = Spare(path, self._files.create(path), size_bytes)
        try:
            self._files.fill(spare.handle, size_bytes)
            self._files.sync(spare.handle)
        except OSError:
            self.discard(spare)
            raise
        return spare
